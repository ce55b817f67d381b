"""The sample data: regenerated here, and looked at for what an honest scan must show."""

from __future__ import annotations

import hashlib
import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
import pytest

from mrics.errors import MricsError
from mrics.numerics import centred_fft
from mrics.phantom.__main__ import main
from mrics.phantom.record import white_noise
from mrics.phantom.sample import gradient_echo, make_sample_data, subjects, to_counts, write_pair
from mrics.phantom.tissues import TISSUES

FOLDER = Path(__file__).resolve().parents[2] / "sample_data"
STEMS = [f"sub-{s}_acq-gre3d" for s in "abc"] + [f"sub-{s}_acq-tse2d" for s in "ac"]


def stored(stem: str) -> tuple[np.ndarray, Any]:
    parts = [nib.load(FOLDER / f"{stem}_part-{p}_PDw.nii.gz") for p in ("real", "imag")]
    return parts[0].get_fdata() + 1j * parts[1].get_fdata(), parts[0]


@pytest.fixture(scope="module")
def made() -> tuple[np.ndarray, Any, float]:
    return gradient_echo(subjects()[1])


def test_one_subject_is_made_again_within_one_count(made: tuple[np.ndarray, Any, float]) -> None:
    data, _, sigma = made
    for part, counts in zip(("real", "imag"), to_counts(data, sigma / 12.0), strict=True):
        image = nib.load(FOLDER / f"sub-b_acq-gre3d_part-{part}_PDw.nii.gz")
        before = np.asarray(image.dataobj.get_unscaled()).astype(int)
        assert np.abs(counts.astype(int) - before).max() <= 1
        assert float(image.dataobj.slope) == pytest.approx(sigma / 12.0, rel=1e-6)


def test_files_match_their_hashes_and_size_limit() -> None:
    sums = dict(
        reversed(row.split("  ")) for row in (FOLDER / "SHA256SUMS").read_text().split("\n") if row
    )
    names = {f"{stem}_part-{p}_PDw.nii.gz" for stem in STEMS for p in ("real", "imag")}
    assert names | {"features.json"} == set(sums)
    for name, digest in sums.items():
        assert hashlib.sha256((FOLDER / name).read_bytes()).hexdigest() == digest
    assert sum((FOLDER / name).stat().st_size for name in names) < 12e6


@pytest.mark.parametrize("stem", STEMS)
def test_header_is_plain_and_dateless(stem: str) -> None:
    for part in ("real", "imag"):
        path = FOLDER / f"{stem}_part-{part}_PDw.nii.gz"
        assert path.read_bytes()[3:8] == bytes(5)  # no name flag, modification time 0 (RFC 1952)
        header = nib.load(path).header
        assert header.get_data_dtype() == np.int16
        assert bytes(header["descrip"]).rstrip(b"\0") == b"mrics research only"
        assert header.get_xyzt_units()[0] == "mm"
        assert header.get_dim_info() == (0, 1, 2)  # readout, phase, partition or slice
        assert np.allclose(header.get_sform(), header.get_qform(), atol=1e-4)


def sigma_of(stem: str) -> float:
    subject, acquisition = stem.split("_acq-")
    known = json.loads((FOLDER / "features.json").read_text())
    return float(known["subjects"][subject]["sigma"][acquisition])


@pytest.mark.parametrize("stem", STEMS[:3])
def test_air_is_rayleigh_and_noise_is_as_stated(stem: str) -> None:
    """Background magnitude: mean sqrt(pi/2) sigma, mean/SD 1.913 (Gudbjartsson & Patz 1995)."""
    magnitude = np.abs(stored(stem)[0])
    corners = (magnitude[:, -14:, :6], magnitude[:, -14:, -6:])  # clear of the leg's ringing
    air = np.concatenate([part.ravel() for part in corners])
    assert air.mean() / sigma_of(stem) == pytest.approx(np.sqrt(np.pi / 2), rel=0.03)
    assert air.mean() / air.std() == pytest.approx(1.913, rel=0.04)


def test_white_noise_has_the_stated_deviation_in_both_parts() -> None:
    noise = white_noise((40, 50, 60), 0.7, 3, "test")
    # SD of an estimated SD is 1/sqrt(2 n) = 0.2 % here.
    assert noise.real.std() == pytest.approx(0.7, rel=0.01)
    assert noise.imag.std() == pytest.approx(0.7, rel=0.01)
    assert abs(np.vdot(noise.real, noise.imag)) / noise.size < 0.01


@pytest.mark.parametrize("stem", STEMS)
def test_phase_is_not_trivial_and_k_space_is_full(stem: str) -> None:
    """Not Hermitian (so half of k-space tells nothing of the rest), and no empty outer k-space."""
    data, _ = stored(stem)
    kspace = centred_fft(data, axes=(0, 1))
    mirror = kspace[-1:0:-1, -1:0:-1].conj()
    core = kspace[1:, 1:]
    assert np.linalg.norm(core - mirror) / np.linalg.norm(core) > 0.5
    energy = np.abs(kspace) ** 2
    rim = np.concatenate([energy[:, :3].ravel(), energy[:, -3:].ravel()])
    assert rim.mean() > 1.9 * sigma_of(stem) ** 2  # noise energy of a complex sample is 2 sigma^2


@pytest.mark.parametrize("index", [0, 1, 2])
def test_features_sit_in_the_tissue_they_name(index: int) -> None:
    subject = subjects()[index]
    names = list(TISSUES)
    palette = {name: (n, 1.0) for n, name in enumerate(names)}
    knee = replace(subject.knee, features=())
    side = -1.0 if knee.mirror else 1.0
    for item in subject.knee.features:
        radius = item.diameter_mm / 2
        reach = np.linspace(-radius, radius, 5)
        x, y, z = item.centre_mm
        parts = knee.signal(z + reach, y + reach, side * x + reach, palette)
        ball = reach[:, None, None] ** 2 + reach[:, None] ** 2 + reach**2 <= radius**2
        share = parts[names.index(item.tissue)][ball].mean()
        assert share > (0.6 if item.tissue == "cartilage" else 0.85), item


def test_listed_feature_positions_agree_with_the_stored_affines() -> None:
    known = json.loads((FOLDER / "features.json").read_text())["subjects"]
    for stem in STEMS:
        subject, acquisition = stem.split("_acq-")
        data, image = stored(stem)
        for item in known[subject]["features"]:
            index = np.array(item["voxel"][acquisition])
            world = nib.affines.apply_affine(image.affine, index)
            assert np.allclose(world, item["world_mm"], atol=0.02)
            if acquisition == "gre3d":
                assert np.all(index >= 0)
                assert np.all(index < data.shape)


def test_marrow_spots_change_the_signal_by_their_contrast() -> None:
    """The object with and without its features differs inside them by the stated share."""
    knee = subjects()[0].knee
    palette = dict.fromkeys(TISSUES, (0, 1.0))
    item = knee.features[0]
    x, y, z = (np.array([v]) for v in item.centre_mm)
    with_it = knee.signal(z, y, x, palette)
    without = replace(knee, features=()).signal(z, y, x, palette)
    assert with_it.item() / without.item() == pytest.approx(1 + item.contrast, rel=1e-5)


def test_written_pair_reads_back(tmp_path: Path) -> None:
    data = np.array([1.0 - 2.0j, 0.26, -3.0j]).reshape(3, 1, 1)
    paths = write_pair(tmp_path, "x", data, np.diag([1.0, 2.0, 3.0, 1.0]), 0.25)
    back = nib.load(paths[0]).get_fdata() + 1j * nib.load(paths[1]).get_fdata()
    assert np.allclose(back.ravel(), [1.0 - 2.0j, 0.25, -3.0j])
    assert [p.name for p in sorted(tmp_path.iterdir())] == sorted(p.name for p in paths)


def test_subject_list_is_three_knees_of_both_sides() -> None:
    assert [s.name for s in subjects()] == ["a", "b", "c"]
    assert {s.knee.mirror for s in subjects()} == {False, True}
    assert len(subjects()[0].knee.features) == 10


def test_folder_that_cannot_be_made_is_refused(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    blocked = tmp_path / "file"
    blocked.write_text("")
    with pytest.raises(MricsError, match="cannot be made"):
        make_sample_data(blocked)
    assert main([str(blocked)]) == 2
    assert "cannot be made" in capsys.readouterr().err
    assert main([]) == 2
