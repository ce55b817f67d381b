"""The recipe of DEVELOPERS.md, walked in a copy of the package.

A law, a recovery with a setting and a map, and a metric are added: each in one file, with one line
in its registry. A study then uses them, and they are found in its results and on its page.
"""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
from pathlib import Path

from small_study import PROTOCOL, write_small_study

import mrics

LAW = """

def _ring(t: Field, _step: float, place: float) -> Field:
    return np.exp(-((t - place) ** 2) / 0.05)
"""

RECOVERY = '''"""Zero-filled image times a number: argmin |x - strength A^H y|."""

from dataclasses import dataclass, replace

import numpy as np

from mrics.recovery.fields import Settings, number
from mrics.recovery.zero_filled import solve as adjoint


@dataclass(frozen=True)
class SETTINGS(Settings):
    """One number."""

    strength: float = number(1.0, 0.0, 10.0)


def solve(acquisition, settings, sigma):
    plain = adjoint(acquisition, settings, sigma)
    image = (plain.image * settings.strength).astype(plain.image.dtype)
    extras = {"folding": np.abs(image - plain.image).astype(np.float32)}
    certificate = replace(plain.certificate, method="halved", note="made by the recipe")
    return replace(plain, image=image, certificate=certificate, extras=extras)
'''

METRIC = '''"""Largest error of a plane."""

import numpy as np


def largest_error(image, reference, mask, data_range):
    gap = np.abs(np.abs(image) - np.abs(reference)) / data_range
    return [float(g[m].max()) if m.any() else None for g, m in zip(gap, mask)]
'''

STUDY = (
    PROTOCOL.replace('law = "power"\nexponent = 3.0', 'law = "ring"\nplace = 0.1')
    .replace(
        '[[recovery]]\nmethod = "zero-filled"', '[[recovery]]\nmethod = "halved"\nstrength = 0.5'
    )
    .replace("nrmse_max = 0.5", "nrmse_max = 0.9\nerror_peak_max = 0.99")
    .replace("draws = 2", "draws = 1")
    .replace("[2, 3]", "2")
)


def add_line(path: Path, after: str, line: str, functions: str = "") -> None:
    """One line into a registry, and what goes with it above the registry."""
    text = path.read_text()
    assert text.count(after) == 1
    path.write_text(text.replace(after, f"{functions}\n\n{after}\n{line}" if functions else
                                 f"{after}\n{line}"))  # fmt: skip


def test_law_recovery_metric_and_map_are_each_a_file_and_a_line(tmp_path: Path) -> None:
    package = tmp_path / "mrics"
    # Compiled kernels come along, so that nothing is compiled again.
    shutil.copytree(Path(mrics.__file__).parent, package, ignore=shutil.ignore_patterns("_shipped"))
    add_line(
        package / "sampling" / "laws.py",
        "LAWS: dict[str, Law] = {",
        '    "ring": Law(_ring, {"place": Parameter(0.3, 0.0, 1.0)}),',
        LAW.strip("\n"),
    )
    (package / "recovery" / "halved.py").write_text(RECOVERY)
    add_line(
        package / "recovery" / "registry.py",
        "METHODS: dict[str, str] = {",
        '    "halved": "halved",',
    )
    (package / "quality" / "peak.py").write_text(METRIC)
    add_line(
        package / "quality" / "metrics.py",
        "METRICS: MappingProxyType[str, Metric] = MappingProxyType(\n    {",
        '        "error_peak": Metric("lower", "largest |a - b| / L", "1", "peak error", '
        '"The worst voxel.", "peak:largest_error"),',
    )
    protocol = write_small_study(tmp_path, scans=1, protocol=STUDY)
    command = [sys.executable, "-c", "from mrics.cli import main; main()"]
    done = subprocess.run(
        [*command, "run", str(protocol), "--out", str(tmp_path / "out"), "--workers", "1"],
        capture_output=True,
        text=True,
        cwd=tmp_path,
        env={**os.environ, "PYTHONPATH": str(tmp_path)},
    )
    assert done.returncode == 0, done.stderr
    results = json.loads((tmp_path / "out" / "results.json").read_text())
    arm = next(one for one in results["arms"] if not one["today"])
    assert arm["sampling_settings"]["law"] == "ring"
    assert arm["recovery"] == "halved"
    assert arm["recovery_settings"] == {"strength": 0.5}
    unit = next(one for one in results["units"] if one["arm"] == arm["id"])
    assert unit["certificate"]["note"] == "made by the recipe"
    # Half of the signal is missing everywhere, more where something was left out.
    assert 0.4 < arm["metrics"]["error_peak"]["mean"] < 1.0
    assert "error_peak_max" in {row["key"] for row in arm["verdict"]["limits"]}
    assert "folding" in {one["kind"] for one in results["maps"]}
    page = (tmp_path / "out" / "report.html").read_text()
    for word in ("peak error", "largest |a - b| / L", "folding", "halved", "ring"):
        assert word in page, word
