"""Smooth phase: a real image times the calibration region's phase; CVXPY, gain, limits."""

from dataclasses import replace

import cvxpy
import numpy as np
import pytest
from invented_planes import written_out

from mrics.encoding import compress, undersample
from mrics.errors import RecoveryError
from mrics.recovery import recover
from mrics.recovery.plane import smooth_phase
from mrics.sampling import draw_pattern

METHODS = [
    ("wavelet", {"shift": "none"}),
    ("wavelet", {"shift": "random"}),
    ("wavelet", {"shift": "full", "tolerance": 1e-2}),
    ("variation", {}),
    ("variation", {"order": 2, "tolerance": 1e-2}),
    ("wavelet+variation", {"tolerance": 1e-2}),
]


@pytest.mark.parametrize("channels", [1, 2])
def test_optimum_equals_an_independent_solver(channels):
    """CVXPY (Clarabel): total variation over real images, the phase multiplied in."""
    shape, sigma, weight = (9, 8), 0.05, 0.8
    y, x = np.mgrid[-1 : 1 : shape[0] * 1j, -1 : 1 : shape[1] * 1j]
    image = ((x**2 + y**2 < 0.6) * np.exp(1j * x))[None]
    pattern = draw_pattern(shape, acceleration=2, calibration=4, seed=1)
    maps = np.array([np.exp(-((x - a) ** 2) + 1j * a * y) for a in (-1, 1)])[:channels]
    acquisition = undersample(
        image, pattern, sigma=sigma, seed=5, sensitivities=maps[None] if channels > 1 else None
    )
    if channels == 1:
        maps = np.ones((1, *shape))
    window = np.ones(shape)
    for axis, n in enumerate(shape):
        k = np.arange(n) - n // 2
        taper = np.where(abs(k) < 2, np.cos(np.pi * k / 4) ** 2, 0)
        window = window * (taper[:, None] if axis == 0 else taper)
    shifted = np.fft.ifftshift(acquisition.kspace[0] * window, axes=(1, 2))
    low = np.fft.fftshift(np.fft.ifft2(shifted, norm="ortho"), axes=(1, 2))
    phase = np.exp(1j * np.angle((np.conj(maps) * low).sum(0)))
    plain = np.eye(72).reshape(72, *shape)
    matrix = written_out(phase * plain, maps, pattern.mask)
    data = acquisition.kspace[0][:, pattern.mask].ravel()
    steps = [(np.roll(plain, -1, a) - plain).reshape(72, 72).T for a in (1, 2)]
    unknown = cvxpy.Variable(72)
    penalty = cvxpy.sum(cvxpy.norm(cvxpy.vstack([d @ unknown for d in steps]), 2, axis=0))
    objective = 0.5 * cvxpy.sum_squares(matrix @ unknown - data) + weight * sigma * penalty
    value = cvxpy.Problem(cvxpy.Minimize(objective)).solve(solver=cvxpy.CLARABEL)
    result = recover(
        acquisition, "variation", weight=weight, phase="smooth", tolerance=1e-8, iterations=20_000
    )
    assert result.certificate.reached
    assert result.certificate.objective == pytest.approx(value, rel=1e-6)
    np.testing.assert_allclose((result.image[0] / phase).imag, 0, atol=1e-12)


@pytest.mark.parametrize(("method", "settings"), METHODS)
def test_knowing_the_phase_helps(planes, lines, method, settings):
    """The test planes are real times a smooth phase: the magnitude's error falls for
    every method."""
    error = [
        np.linalg.norm(
            np.abs(recover(lines, method, weight=0.4, phase=p, **settings).image) - np.abs(planes)
        )
        for p in ("free", "smooth")
    ]
    assert error[1] < 0.95 * error[0]


@pytest.mark.parametrize(("method", "settings"), METHODS)
def test_turning_the_data_turns_the_image(lines, method, settings):
    factor = 3e7 * np.exp(0.7j)
    scaled = replace(lines, kspace=factor * lines.kspace, sigma_added=abs(factor) * 0.02)
    settings = {"weight": 0.4, "phase": "smooth", **settings}
    one, two = (recover(a, method, **settings).image for a in (lines, scaled))
    np.testing.assert_allclose(two, factor * one, rtol=0, atol=1e-9 * abs(factor) * abs(one).max())


def test_phase_of_a_smooth_object_is_found(planes):
    """Fully sampled: the estimate is the phase that was multiplied in, where there is signal."""
    data = np.fft.fft2(planes[0], norm="ortho")[None]
    found = smooth_phase(data, None, (16, 16))
    y, x = np.mgrid[-1:1:40j, -1:1:48j]
    inside = x**2 + y**2 < 0.5
    error = np.angle(found * np.exp(-1j * (0.5 * x + 0.8 * y * x)))[inside]
    assert np.sqrt(np.mean(error**2)) < 0.06


def test_certificate_says_so(lines):
    result = recover(lines, weight=0.4, phase="smooth", shift="none")
    assert "phase of the calibration region" in result.certificate.note


def test_virtual_channels_are_taken(planes):
    """Fewer virtual channels than the data hold, with a phase or without."""
    y, x = np.mgrid[-1:1:40j, -1:1:48j]
    maps = np.array([np.exp(-((x - a) ** 2) - (y - b) ** 2) for a in (-1, 1) for b in (-1, 1)])
    pattern = draw_pattern((40, 48), acceleration=3, calibration=10, seed=4)
    acquisition = compress(
        undersample(planes, pattern, sigma=0.02, sensitivities=maps[None]), channels=3
    )
    for phase in ("free", "smooth"):
        found = recover(acquisition, "variation", weight=0.5, phase=phase)
        assert found.certificate.reached


def test_without_a_centre_there_is_no_phase(lines):
    with pytest.raises(RecoveryError, match=r"calibration region of at least 4 lines, got \(0,\)"):
        recover(replace(lines, calibration=(0,)), weight=1.0, phase="smooth")
