"""Full cycle spinning: the frame penalty against PyWavelets, its optimum against CVXPY."""

import warnings
from itertools import product

import cvxpy
import numpy as np
import pytest
import pywt

from mrics.encoding import undersample
from mrics.recovery import recover
from mrics.recovery.frame import FrameWavelet
from mrics.sampling import draw_pattern


def bands(frame, image):
    """K x of every level."""
    found = np.empty(frame.size)
    frame.analyse(image.copy().view(float), found)
    return found.reshape(frame.state.shape).view(complex)


def mean_over_shifts(image, wavelet, levels):
    """Mean over all shifts of the L1 norm of PyWavelets' periodized details."""
    side = 2**levels
    total = 0.0
    for down, right in product(range(side), repeat=2):
        moved = np.roll(image, (down, right), (0, 1))
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", UserWarning)
            details = pywt.wavedec2(moved, wavelet, mode="periodization", level=levels)[1:]
        total += sum(np.abs(band).sum() for level in details for band in level)
    return total / side**2


@pytest.mark.parametrize(("wavelet", "levels"), [("haar", 3), ("db2", 2), ("sym4", 3)])
def test_penalty_is_the_mean_over_all_shifts(wavelet, levels):
    rng = np.random.default_rng(0)
    image = rng.standard_normal((16, 24)) + 1j * rng.standard_normal((16, 24))
    frame = FrameWavelet((16, 24), np.float64, wavelet, levels)
    own = sum(
        0.5**level * np.abs(band).sum() for level, band in enumerate(bands(frame, image), start=1)
    )
    assert own == pytest.approx(mean_over_shifts(image, wavelet, levels), rel=1e-9)


def test_frame_keeps_energy_and_has_the_stated_symbol():
    """Sum of bands' energies and the coarsest approximation's is the image's, on any size."""
    rng = np.random.default_rng(1)
    image = rng.standard_normal((15, 22)) + 1j * rng.standard_normal((15, 22))
    frame = FrameWavelet((15, 22), np.float64, "db3", 3)
    spectrum = np.fft.fft2(image, norm="ortho")
    for level, band in enumerate(bands(frame, image)):
        by_symbol = (frame._power[level] * np.abs(spectrum) ** 2).sum()
        assert (np.abs(band) ** 2).sum() == pytest.approx(by_symbol, rel=1e-10)
    coarsest = 1 - frame._power.sum(0)
    assert coarsest[0, 0] == pytest.approx(1, rel=1e-12)
    assert coarsest.min() >= -1e-12


@pytest.mark.parametrize("axes", [1, 2])
def test_optimum_equals_an_independent_solver(axes):
    """CVXPY (Clarabel) minimises the mean over all shifts of PyWavelets' Haar details."""
    shape, levels, sigma, weight = (8, 12), 2, 0.05, 1.2
    y, x = np.mgrid[-1 : 1 : shape[0] * 1j, -1 : 1 : shape[1] * 1j]
    image = ((x**2 + y**2 < 0.6) * np.exp(1j * x))[None]
    pattern = draw_pattern(shape[:axes], acceleration=2, calibration=2, seed=1)
    acquisition = undersample(image, pattern, sigma=sigma, seed=5)
    basis = np.eye(96).reshape(96, *shape)
    rows = []
    for down, right in product(range(4), repeat=2):
        details = pywt.wavedec2(
            np.roll(basis, (down, right), (1, 2)), "haar", mode="periodization", level=levels,
            axes=(1, 2),
        )[1:]  # fmt: skip
        rows += [band.reshape(96, -1).T for level in details for band in level]
    analysis = np.concatenate(rows)
    kspace = np.fft.fftshift(
        np.fft.fft2(np.fft.ifftshift(basis, axes=(1, 2)), norm="ortho"), axes=(1, 2)
    )
    mask = np.broadcast_to(pattern.mask.reshape(8, -1), shape)
    matrix, data = kspace[:, mask].T, acquisition.kspace[0, 0][mask]
    unknown = cvxpy.Variable(96, complex=True)
    objective = 0.5 * cvxpy.sum_squares(matrix @ unknown - data) + weight * sigma / 16 * (
        cvxpy.sum(cvxpy.abs(analysis @ unknown))
    )
    value = cvxpy.Problem(cvxpy.Minimize(objective)).solve(solver=cvxpy.CLARABEL)
    certificate = recover(
        acquisition, weight=weight, wavelet="haar", levels=levels, shift="full",
        tolerance=1e-8, iterations=20_000,
    ).certificate  # fmt: skip
    assert certificate.reached
    assert certificate.objective == pytest.approx(value, rel=1e-6)


def test_shifting_the_object_shifts_the_image(planes):
    """With full sampling the certified variant commutes with every shift."""
    pattern = draw_pattern((40, 48), acceleration=1, calibration=8)
    settings = {"weight": 1.0, "shift": "full", "tolerance": 1e-7, "iterations": 3000}
    acquired = undersample(planes[:1], pattern, sigma=0.0)
    moved = undersample(np.roll(planes[:1], (3, 5), (1, 2)), pattern, sigma=0.0)
    from dataclasses import replace

    one = recover(replace(acquired, sigma_added=0.05), **settings).image
    two = recover(replace(moved, sigma_added=0.05), **settings).image
    np.testing.assert_allclose(two, np.roll(one, (3, 5), (1, 2)), atol=1e-3)
