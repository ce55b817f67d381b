"""Multi-channel closed-form k-space: exact cases, coil fields, and no inverse crime."""

from __future__ import annotations

import numpy as np
import pytest

from mrics.encoding import simulate_coils
from mrics.errors import MricsError
from mrics.numerics import centred_fft, centred_ifft
from mrics.phantom import Ellipse, Ellipsoid, Gaussian, closed_form_kspace, shepp_logan
from mrics.phantom.channels import WaveMaps, channel_kspace, fit_waves
from mrics.phantom.ellipses import positions


def one_wave(n: tuple[int, ...], extent: tuple[float, ...], order: int = 2) -> WaveMaps:
    coefficients = np.zeros((1, *[2 * order + 1] * len(n)), complex)
    coefficients[(0, *(order + m for m in n))] = 1.0
    return WaveMaps(extent, coefficients)


@pytest.mark.parametrize("shape", [(32, 30), (31, 28)])
def test_uniform_sensitivity_gives_the_ellipse_formula(shape: tuple[int, int]) -> None:
    """A a b J1(2 pi K)/K on the acquired grid (Van de Walle et al. 2000)."""
    voxel = (2.0, 1.5)
    extent = (shape[0] * 2.0, shape[1] * 1.5)
    items = [Ellipse((20.0, 9.0), (3.0, -4.0), 25.0, 1.2), Ellipse((5.0, 6.0), amplitude=-0.4)]
    got = channel_kspace(items, one_wave((0, 0), extent), shape)
    assert np.allclose(got[0], closed_form_kspace(items, shape, voxel), atol=1e-12)


def test_even_wave_is_a_shift_by_whole_samples() -> None:
    """exp(2 pi i r / FOV) moves k-space by one sample (shift theorem); n counts half steps."""
    shape, extent = (24, 20), (24.0, 20.0)
    items = [Ellipse((7.0, 5.0), (1.0, 2.0), 10.0)]
    plain = channel_kspace(items, one_wave((0, 0), extent), shape)[0]
    moved = channel_kspace(items, one_wave((2, -2), extent), shape)[0]
    assert np.allclose(moved[1:, :-1], plain[:-1, 1:], atol=1e-12)


def test_three_dimensions() -> None:
    shape, voxel = (12, 10, 9), (1.0, 1.5, 2.0)
    extent = (12.0, 15.0, 18.0)
    items = [Ellipsoid((3.0, 4.0, 5.0), (0.5, 1.0, -1.0))]
    got = channel_kspace(items, one_wave((0, 0, 0), extent, order=1), shape)
    assert np.allclose(got[0], closed_form_kspace(items, shape, voxel), atol=1e-12)


@pytest.fixture(scope="module")
def coil_waves() -> tuple[WaveMaps, float, np.ndarray]:
    """Six loops around a 192 mm field of view, fitted on the ellipse that holds the object."""
    coils = simulate_coils((1, 64, 64), (3.0, 3.0, 3.0), number=6, standoff_mm=25.0)
    r = positions((64, 64), (3.0, 3.0))
    points = np.concatenate([np.zeros((*r.shape[:-1], 1)), r], axis=-1)
    values = coils.field_at(points)
    inside = (r[..., 0] / 92) ** 2 + (r[..., 1] / 92) ** 2 <= 1
    maps, error = fit_waves(values[:, inside], r[inside], (192.0, 192.0), order=6)
    return maps, error, values


def test_coil_fields_are_sums_of_few_waves(
    coil_waves: tuple[WaveMaps, float, np.ndarray],
) -> None:
    maps, error, values = coil_waves
    assert error < 1e-3
    r = positions((64, 64), (3.0, 3.0))[10:54, 12:50]
    assert np.allclose(maps.value(r), values[:, 10:54, 12:50], atol=4e-3)


def test_band_limited_object_equals_the_transform_of_its_channel_images(
    coil_waves: tuple[WaveMaps, float, np.ndarray],
) -> None:
    """A wide Gaussian times a smooth field is band-limited: DFT and closed form then agree."""
    maps = coil_waves[0]
    items = [Gaussian(12.0, (10.0, -8.0), amplitude=1.0 + 0.5j)]
    r = positions((64, 64), (3.0, 3.0))
    raster = centred_fft(items[0].value(r) * maps.value(r))
    got = channel_kspace(items, maps, (64, 64))
    assert np.linalg.norm(got - raster) / np.linalg.norm(raster) < 1e-6


def test_combined_channels_ring_and_cannot_equal_the_raster(
    coil_waves: tuple[WaveMaps, float, np.ndarray],
) -> None:
    """No inverse crime: fully sampled, exactly known maps, and still an error (Guerquin-Kern)."""
    maps = coil_waves[0]
    head = shepp_logan(scale=95.0)
    r = positions((64, 64), (3.0, 3.0))
    images = centred_ifft(channel_kspace(head, maps, (64, 64)))
    fields = maps.value(r)
    energy = (np.abs(fields) ** 2).sum(axis=0)
    combined = (fields.conj() * images).sum(axis=0) / energy
    truth = sum(e.value(r) for e in head)
    inside = truth > 0
    error = np.linalg.norm((combined - truth)[inside]) / np.linalg.norm(truth[inside])
    assert 0.05 < error < 0.5
    core = (slice(20, 44), slice(24, 40))
    assert combined[core].real.mean() == pytest.approx(truth[core].mean(), rel=0.05)
    assert np.abs(combined[core].imag).max() < 0.1


def test_too_few_points_are_refused() -> None:
    with pytest.raises(MricsError, match="10 points cannot fix 121 waves"):
        fit_waves(np.ones((1, 10)), np.zeros((10, 2)), (1.0, 1.0))
