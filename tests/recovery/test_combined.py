"""Wavelet and total variation together: CVXPY, and the limits of either alone."""

from itertools import product

import cvxpy
import numpy as np
import pytest
import pywt
from invented_planes import written_out

from mrics.encoding import undersample
from mrics.errors import RecoveryError
from mrics.recovery import check_settings, recover
from mrics.sampling import draw_pattern


@pytest.mark.parametrize("channels", [1, 2])
def test_optimum_equals_an_independent_solver(channels):
    """CVXPY (Clarabel): mean over all shifts of PyWavelets' Haar details, and differences."""
    shape, sigma, weight, share = (8, 12), 0.05, 0.7, 1.4
    y, x = np.mgrid[-1:1:8j, -1:1:12j]
    image = ((x**2 + y**2 < 0.6) * np.exp(1j * x))[None]
    pattern = draw_pattern(shape, acceleration=2, calibration=2, seed=1)
    maps = np.array([np.exp(-((x - a) ** 2) + 1j * a * y) for a in (-1, 1)])[:channels]
    acquisition = undersample(
        image, pattern, sigma=sigma, seed=5, sensitivities=maps[None] if channels > 1 else None
    )
    if channels == 1:
        maps = np.ones((1, *shape))
    plain = np.eye(96).reshape(96, *shape)
    rows = []
    for down, right in product(range(4), repeat=2):
        details = pywt.wavedec2(
            np.roll(plain, (down, right), (1, 2)), "haar", mode="periodization", level=2,
            axes=(1, 2),
        )[1:]  # fmt: skip
        rows += [band.reshape(96, -1).T for level in details for band in level]
    analysis = np.concatenate(rows)
    matrix = written_out(plain, maps, pattern.mask)
    data = acquisition.kspace[0][:, pattern.mask].ravel()
    steps = [(np.roll(plain, -1, a) - plain).reshape(96, 96).T for a in (1, 2)]
    unknown = cvxpy.Variable(96, complex=True)
    parts = [f(d @ unknown) for d in steps for f in (cvxpy.real, cvxpy.imag)]
    penalty = cvxpy.sum(cvxpy.abs(analysis @ unknown)) / 16 + share * cvxpy.sum(
        cvxpy.norm(cvxpy.vstack(parts), 2, axis=0)
    )
    objective = 0.5 * cvxpy.sum_squares(matrix @ unknown - data) + weight * sigma * penalty
    value = cvxpy.Problem(cvxpy.Minimize(objective)).solve(solver=cvxpy.CLARABEL)
    certificate = recover(
        acquisition, "wavelet+variation", weight=weight, variation=share, wavelet="haar",
        levels=2, tolerance=1e-7, iterations=20_000,
    ).certificate  # fmt: skip
    assert certificate.reached
    assert certificate.objective == pytest.approx(value, rel=1e-6)


def test_either_penalty_alone_is_the_limit(points):
    """A share near 0 gives the wavelet recovery, a large share that of the variation."""
    settings = {"tolerance": 1e-4, "iterations": 2000}
    wavelet = recover(points, weight=0.5, shift="full", **settings).image
    variation = recover(points, "variation", weight=0.5, **settings).image
    little = recover(points, "wavelet+variation", weight=0.5, variation=1e-3, **settings).image
    much = recover(points, "wavelet+variation", weight=5e-4, variation=1e3, **settings).image
    np.testing.assert_allclose(little, wavelet, atol=0.02)
    np.testing.assert_allclose(much, variation, atol=0.02)
    assert np.abs(wavelet - variation).max() > 0.05


def test_bad_settings_are_named():
    with pytest.raises(RecoveryError, match=r"variation must be a number above 0.*got -1"):
        check_settings("wavelet+variation", {"variation": -1.0})
