"""Body mask and noise level against known truth and published constants."""

from __future__ import annotations

import numpy as np
import pytest
from nifti_files import blob
from open_volumes import open_volume
from scipy import ndimage, stats

from mrics.errors import ScanError
from mrics.numerics import stream
from mrics.scan import Scan, body_mask, read_scan, scan_noise, scan_sigma
from mrics.scan.noise import RAYLEIGH_RATIO, channels_of_ratio


def _noise(shape: tuple[int, ...], sigma: float, name: str) -> np.ndarray:
    rng = stream(1, name)
    return sigma * (rng.standard_normal(shape) + 1j * rng.standard_normal(shape))


def _scan(data: np.ndarray) -> Scan:
    kind = np.complex64 if np.iscomplexobj(data) else np.float32
    return Scan(data=data.astype(kind), affine=np.eye(4), voxel_mm=(1, 1, 1))


def test_rayleigh_constants() -> None:
    # NEMA MS 1: SD of Rayleigh background is sqrt(2 - pi/2) = 0.655 sigma; Gudbjartsson & Patz
    # 1995: mean sqrt(pi/2) sigma. scipy.stats is the independent reference.
    law = stats.rayleigh
    assert law.std() == pytest.approx(0.655, abs=5e-4)
    assert law.mean() / law.std() == pytest.approx(RAYLEIGH_RATIO, rel=1e-12)
    simulated = np.abs(_noise((100, 100, 50), 1.0, "rayleigh"))
    assert simulated.std() == pytest.approx(0.655136, rel=5e-3)


@pytest.mark.parametrize("sigma", [5.0, 20.0, 100.0])
def test_mask_of_an_ellipsoid(sigma: float) -> None:
    shape = (64, 60, 40)
    clean = blob(shape)
    truth = clean > 120  # 0.12 x the tissue's magnitude
    mask = body_mask(np.abs(clean + _noise(shape, sigma, f"mask {sigma}")))
    overlap = 2 * (mask & truth).sum() / (mask.sum() + truth.sum())
    assert overlap > 0.93
    assert not (mask & (ndimage.distance_transform_edt(~truth) > 4)).any()
    assert not (ndimage.binary_erosion(truth, iterations=2) & ~mask).any()


def test_mask_fills_holes_and_keeps_dark_tissue() -> None:
    shape = (64, 60, 40)
    clean = blob(shape)
    clean[28:36, 26:34] = 0.0  # a channel that leaves through both ends of k
    clean[20:26, 20:26, 18:22] *= 0.2
    mask = body_mask(np.abs(clean + _noise(shape, 10.0, "holes")))
    assert mask[32, 30, 20]
    assert mask[22, 22, 20]


def test_mask_without_air_is_everything() -> None:
    data = 1000.0 + 50 * np.abs(_noise((32, 32, 16), 1.0, "full"))
    assert body_mask(data).all()


def test_mask_shapes_and_refusal() -> None:
    data = blob((20, 20, 20))
    many = np.repeat(data[..., None], 3, axis=3)
    np.testing.assert_array_equal(body_mask(many), body_mask(data))
    np.testing.assert_array_equal(body_mask(many[:, :, :, None, :]), body_mask(data))
    with pytest.raises(ScanError, match="volume of 2 axes"):
        body_mask(data[0])


def test_mask_of_a_real_head_agrees_with_its_stripped_background() -> None:
    # Volume A was masked by its makers: its exact zeros are the truth to compare with.
    scan = read_scan(open_volume("A"))
    kept = scan.data[..., 0] > 0
    filled = ndimage.binary_fill_holes(kept)
    mask = body_mask(scan)
    assert 2 * (mask & filled).sum() / (mask.sum() + filled.sum()) > 0.95


@pytest.mark.parametrize("kind", ["complex", "magnitude"])
@pytest.mark.parametrize("sigma", [5.0, 30.0])
def test_sigma_from_air(kind: str, sigma: float) -> None:
    shape = (64, 60, 40)
    data = blob(shape) + _noise(shape, sigma, f"air {sigma}")
    scan = _scan(np.abs(data) if kind == "magnitude" else data)
    found = scan_noise(scan)
    assert found.sigma == pytest.approx(sigma, rel=0.02)
    assert found.ratio == pytest.approx(RAYLEIGH_RATIO, rel=0.02)


@pytest.mark.parametrize("kind", ["complex", "magnitude"])
def test_sigma_of_a_masked_scan_comes_from_the_body(kind: str) -> None:
    shape = (64, 60, 40)
    data = blob(shape) + _noise(shape, 20.0, "masked")
    data[blob(shape) < 100] = 0
    scan = _scan(np.abs(data) if kind == "magnitude" else data)
    found = scan_noise(scan)
    assert found.method == "detail"
    assert found.sigma == pytest.approx(20.0, rel=0.05)


def test_sigma_of_masked_repeats_comes_from_their_difference() -> None:
    # Volume A holds two repeats of a masked brain; its SNR from repeats is stated as 59.
    scan = read_scan(open_volume("A"))
    found = scan_noise(scan)
    assert found.method == "repeat"
    mask = body_mask(scan)
    assert scan.data[mask].mean() / found.sigma == pytest.approx(59, rel=0.25)


@pytest.mark.parametrize("channels", [2, 4, 8])
def test_sigma_of_root_sum_of_squares(channels: int) -> None:
    # Constantinides et al. 1997: mean / SD of central chi noise, n = 4: 2.741625 / 0.695337.
    shape = (64, 60, 40)
    parts = [
        blob(shape) / np.sqrt(channels) + _noise(shape, 20.0, f"c{n}") for n in range(channels)
    ]
    combined = np.sqrt(sum(np.abs(part) ** 2 for part in parts))
    found = scan_noise(_scan(combined))
    assert found.sigma == pytest.approx(20.0, rel=0.04)
    assert channels_of_ratio(2.741625 / 0.695337) == pytest.approx(4, rel=1e-3)
    assert channels_of_ratio(found.ratio) == pytest.approx(channels, rel=0.06)


def test_ghosts_in_air_do_not_raise_sigma_much() -> None:
    shape = (64, 60, 40)
    clean = blob(shape)
    data = clean + 0.05 * np.roll(clean, 30, axis=1) + _noise(shape, 10.0, "ghost")
    assert scan_sigma(_scan(np.abs(data))) == pytest.approx(10.0, rel=0.1)


def test_sigma_of_real_air() -> None:
    # Background SNR of volume B, stated with the volume: 39, by the Rayleigh relation.
    scan = read_scan(open_volume("B"))
    mask = body_mask(scan)
    assert scan.data[mask].mean() / scan_sigma(scan) == pytest.approx(39, rel=0.25)
