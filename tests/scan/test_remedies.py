"""Remedies: what they change, what they keep, and that they say so."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scan_manipulations import as_scan, axes_of, noisy, partial_fourier, sample, zero_fill

from mrics.errors import ScanError
from mrics.numerics import centred_fft
from mrics.sampling import draw_pattern
from mrics.scan import (
    Axes,
    Scan,
    acquired_region,
    add_noise,
    add_phase,
    crop_kspace,
    inspect_scan,
    remedied,
    scan_sigma,
)

TSE = "sub-a_acq-tse2d"


def _world(scan: Scan, index: tuple[int, int, int]) -> np.ndarray:
    return (scan.affine @ [*index, 1])[:3]


@pytest.mark.parametrize("count", [(120, 100), (121, 99)])
def test_cropping_undoes_zero_filling(count: tuple[int, int]) -> None:
    original = sample(TSE)[: count[0], : count[1]]
    padded = as_scan(zero_fill(original, 1.5, (0, 1)))
    cropped = crop_kspace(padded, i=count[0], j=count[1])
    np.testing.assert_allclose(cropped.data, original, atol=2e-4 * np.abs(original).max())
    assert cropped.remedies == (f"k-space cropped along i to {count[0]}, j to {count[1]}",)
    assert cropped.sha256 != padded.sha256
    # The centre of the transform stays where it is, and so does the field of view.
    centres = [tuple(n // 2 for n in s.shape) for s in (padded, cropped)]
    np.testing.assert_allclose(_world(padded, centres[0]), _world(cropped, centres[1]))
    fields = [np.multiply(s.voxel_mm, s.shape) for s in (padded, cropped)]
    np.testing.assert_allclose(*fields)


def test_cropping_a_magnitude_scan_stays_real() -> None:
    scan = as_scan(np.abs(sample(TSE)))
    cropped = crop_kspace(scan, j=128)
    assert cropped.data.dtype == np.float32
    assert cropped.data.mean() == pytest.approx(float(scan.data.mean()), rel=1e-3)


@pytest.mark.parametrize("samples", [{"i": 1000}, {"j": 1}, {"x": 10}])
def test_cropping_refuses(samples: dict[str, int]) -> None:
    with pytest.raises(ScanError, match="cannot be kept of a scan of shape"):
        crop_kspace(as_scan(sample(TSE)), **samples)


def test_remedied_scan_has_no_finding_left_but_the_invented_phase() -> None:
    scan = as_scan(np.abs(zero_fill(sample(TSE), 1.25, (0, 1))))
    found = inspect_scan(scan, axes_of(TSE))
    better = remedied(scan, found, seed=3)
    assert better.shape[:2] == pytest.approx(sample(TSE).shape[:2], rel=0.05)
    assert len(better.remedies) == 2
    assert better.complex_source == "invented phase"
    left = {f.code for f in inspect_scan(better, axes_of(TSE))}
    assert not left & {"zero-filled", "magnitude-only"}


def test_invented_phase_is_smooth_and_breaks_the_symmetry_of_kspace() -> None:
    scan = as_scan(np.abs(sample(TSE)))
    lit = add_phase(scan, strength_rad=1.5, seed=4)
    np.testing.assert_allclose(np.abs(lit.data), scan.data, rtol=1e-4, atol=1e-3)
    steps = np.angle(lit.data[1:] * np.conj(lit.data[:-1]))[scan.data[1:] > 20]
    assert np.abs(steps).max() < np.pi / 8
    plane = centred_fft(lit.data[1:, 1:, 9])
    mirrored = np.conj(plane[::-1, ::-1])
    assert np.linalg.norm(plane - mirrored) > 0.5 * np.linalg.norm(plane)
    same = add_phase(scan, strength_rad=1.5, seed=4)
    np.testing.assert_array_equal(same.data, lit.data)
    with pytest.raises(ScanError, match=r"has phase already .invented phase"):
        add_phase(lit)


def test_added_noise_has_the_stated_level() -> None:
    quiet = as_scan(sample(TSE))
    louder = add_noise(quiet, 10.0, seed=1)
    part = louder.data - quiet.data
    assert part.real.std() == pytest.approx(10.0, rel=0.01)
    assert part.imag.std() == pytest.approx(10.0, rel=0.01)
    expected = np.hypot(10.0, scan_sigma(quiet))
    assert scan_sigma(louder) == pytest.approx(expected, rel=0.03)
    rician = add_noise(replace(as_scan(np.abs(sample(TSE))), complex_source="magnitude"), 10.0)
    assert rician.data.dtype == np.float32
    assert rician.data.min() >= 0
    with pytest.raises(ScanError, match="sigma -1 cannot be added"):
        add_noise(quiet, -1)


def test_acquired_region_of_partial_fourier_and_zero_filling() -> None:
    data = zero_fill(partial_fourier(sample(TSE), 6 / 8, 1), 1.5, (0,))
    region = acquired_region(as_scan(data), Axes("i", "j"))
    measured = sample(TSE).shape
    assert region["i"].sum() == measured[0]
    assert region["j"].sum() == round(0.75 * measured[1])
    assert not region["j"][0]
    assert region["j"][-1]
    whole = acquired_region(as_scan(noisy(sample(TSE), 1.0, 0)), Axes("i", "j"))
    assert all(held.all() for held in whole.values())


@pytest.mark.parametrize("high", [False, True])
def test_partial_fourier_is_remedied_by_patterns_of_the_measured_side(high: bool) -> None:
    data = partial_fourier(noisy(sample(TSE), 1.0, 0), 6 / 8, 1)
    scan = as_scan(np.conj(data) if high else data)
    [finding] = [f for f in inspect_scan(scan, axes_of(TSE)) if f.code == "partial-fourier"]
    assert dict(finding.settings)["empty"] == ("high" if high else "low")
    share = dict(finding.settings)["j"]
    assert f"partial_fourier = {share:.3f}" in finding.advice
    better = remedied(scan, [finding])
    held = acquired_region(better, Axes("i", "j"))["j"]
    # Lines that patterns leave out are the empty ones, all but one at the edge.
    kept = draw_pattern(held.shape, law="uniform", acceleration=1 / share, partial_fourier=share)
    assert np.count_nonzero(kept.mask != held) <= 1
    np.testing.assert_allclose(np.abs(better.data), np.abs(scan.data))
    assert bool(better.remedies) == high


def test_partial_fourier_of_a_magnitude_scan_has_no_remedy() -> None:
    data = np.abs(partial_fourier(noisy(sample(TSE), 1.0, 0), 6 / 8, 1))
    found = {f.code: f for f in inspect_scan(as_scan(data), axes_of(TSE))}
    assert found["partial-fourier"].remedy == ""
