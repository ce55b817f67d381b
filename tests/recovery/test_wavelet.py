"""The wavelet recovery: optimum against an independent solver, certificate, shifts."""

import warnings
from dataclasses import replace

import cvxpy
import numpy as np
import pytest
import pywt

from mrics.encoding import undersample
from mrics.recovery import recover
from mrics.recovery.penalties import levels_for, padded_shape
from mrics.sampling import draw_pattern


def synthesis_matrix(shape, padded, wavelet, levels):
    """P W^H column by column from PyWavelets, and which coefficients are penalised."""
    template = pywt.wavedec2(np.zeros(padded), wavelet, mode="periodization", level=levels)
    array, slices = pywt.coeffs_to_array(template)
    columns = []
    for index in range(array.size):
        unit = np.zeros(padded)
        unit.flat[index] = 1
        packed = pywt.array_to_coeffs(unit, slices, output_format="wavedec2")
        image = pywt.waverec2(packed, wavelet, mode="periodization")
        columns.append(image[: shape[0], : shape[1]].ravel())
    penalised = np.ones(padded)
    penalised[slices[0]] = 0
    return np.array(columns).T, penalised.ravel()


@pytest.mark.parametrize(("shape", "one_axis"), [((16, 8), True), ((10, 12), False)])
def test_optimum_equals_an_independent_solver(shape, one_axis):
    """CVXPY (Clarabel) minimises the same objective, built from PyWavelets and numpy's FFT."""
    rng = np.random.default_rng(0)
    y, x = np.mgrid[-1 : 1 : shape[0] * 1j, -1 : 1 : shape[1] * 1j]
    image = ((x**2 + y**2 < 0.6) * np.exp(1j * x))[None]
    grid = shape[:1] if one_axis else shape
    pattern = draw_pattern(grid, acceleration=2, calibration=4, seed=1)
    sigma, weight, levels = 0.05, 1.5, 2
    acquisition = undersample(image, pattern, sigma=sigma, seed=int(rng.integers(99)))
    padded = padded_shape(shape, levels)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", UserWarning)
        synthesis, penalised = synthesis_matrix(shape, padded, "db2", levels)
    basis = synthesis.T.reshape(-1, *shape)
    kspace = np.fft.fftshift(
        np.fft.fft2(np.fft.ifftshift(basis, axes=(1, 2)), norm="ortho"), axes=(1, 2)
    )
    mask = np.broadcast_to(pattern.mask[:, None] if one_axis else pattern.mask, shape)
    matrix, data = kspace[:, mask].T, acquisition.kspace[0, 0][mask]
    unknown = cvxpy.Variable(matrix.shape[1], complex=True)
    objective = 0.5 * cvxpy.sum_squares(matrix @ unknown - data) + weight * sigma * cvxpy.sum(
        cvxpy.multiply(penalised, cvxpy.abs(unknown))
    )
    problem = cvxpy.Problem(cvxpy.Minimize(objective))
    problem.solve(solver=cvxpy.CLARABEL)

    result = recover(
        acquisition, weight=weight, wavelet="db2", levels=levels, shift="none",
        tolerance=1e-8, iterations=20_000,
    )  # fmt: skip
    certificate = result.certificate
    assert certificate.reached
    assert certificate.objective == pytest.approx(problem.value, rel=1e-6)
    assert certificate.objective <= problem.value * (1 + 1e-6)
    expected = (synthesis @ unknown.value).reshape(shape)
    np.testing.assert_allclose(result.image[0], expected, atol=2e-3)


def test_gap_bounds_the_distance_to_the_optimum(points):
    settings = {"weight": 1.0, "shift": "none"}
    best = recover(points, tolerance=2e-4, iterations=3000, **settings).certificate
    for iterations in (5, 20, 60):
        early = recover(points, iterations=iterations, tolerance=1e-9, **settings).certificate
        assert not early.reached
        excess = early.objective - best.objective
        assert -2e-4 * best.objective <= excess <= early.optimality * early.objective * 1.001
    assert best.reached


def shaded(planes):
    """Four Gaussian coils whose sum of squares falls to a few per cent of its maximum."""
    y, x = np.mgrid[-1:1:40j, -1:1:48j]
    corners = [(a, b) for a in (-1, 1) for b in (-1, 1)]
    maps = np.array(
        [np.exp(-((y - a) ** 2 + (x - b) ** 2) / 0.8 + 1j * (a * y + b * x)) for a, b in corners]
    )
    energy = (np.abs(maps) ** 2).sum(0)
    assert energy.min() < 0.07 * energy.max()
    pattern = draw_pattern((40, 48), acceleration=4, calibration=8, seed=4)
    return undersample(planes[:1], pattern, sigma=0.02, seed=1, sensitivities=maps[None])


@pytest.mark.parametrize("weight", [3.0, 20.0])
def test_gap_is_true_under_strong_shading(planes, weight):
    """The first image is far too small there, and with it the ball its dual value speaks of."""
    settings = {"weight": weight, "shift": "none", "iterations": 5000}
    acquisition = shaded(planes)
    best = recover(acquisition, tolerance=1e-6, **settings).certificate
    for tolerance in (1e-1, 1e-2, 1e-3):
        early = recover(acquisition, tolerance=tolerance, **settings).certificate
        assert early.reached
        assert early.objective - best.objective <= early.optimality * early.objective * (1 + 1e-9)


def test_a_plane_without_sensitivity_is_zero_and_disturbs_no_other(planes):
    maps = np.ones((2, 2, 40, 48), complex) * np.array([1, 0])[:, None, None, None]
    pattern = draw_pattern((40, 48), acceleration=3, calibration=8, seed=4)
    both = undersample(planes[:2], pattern, sigma=0.02, seed=1, sensitivities=maps[:1])
    both = replace(both, sensitivities=maps)
    result = recover(both, weight=1.0, shift="none").image
    assert not result[1].any()
    alone = replace(both, kspace=both.kspace[:1], pattern_index=both.pattern_index[:1])
    alone = replace(alone, sensitivities=maps[:1])
    np.testing.assert_array_equal(recover(alone, weight=1.0, shift="none").image[0], result[0])


@pytest.mark.parametrize("case", ["points", "lines"])
@pytest.mark.parametrize("iterations", [1, 2, 25, 1000])
def test_the_objective_is_that_of_the_image_handed_back(case, iterations, request):
    """Against PyWavelets and numpy's FFT in double precision, however many iterations ran."""
    acquisition = request.getfixturevalue(case)
    levels = 2
    result = recover(
        acquisition, weight=1.0, shift="none", wavelet="db2", levels=levels,
        iterations=iterations, tolerance=1e-9,
    )  # fmt: skip
    total = 0.0
    for image, data, index in zip(
        result.image, acquisition.kspace[:, 0], acquisition.pattern_index, strict=True
    ):
        image = image.astype(np.complex128)
        kspace = np.fft.fftshift(np.fft.fft2(np.fft.ifftshift(image), norm="ortho"))
        measured = np.broadcast_to(acquisition.mask[index], kspace.shape)
        bands = pywt.wavedec2(image, "db2", mode="periodization", level=levels)
        norm = sum(np.abs(band).sum() for level in bands[1:] for band in level)
        total += 0.5 * np.linalg.norm((kspace - data)[measured]) ** 2
        total += result.certificate.sigma * norm
    assert result.certificate.objective == pytest.approx(total, rel=2e-5)


def test_full_sampling_and_no_noise_give_the_image(planes):
    pattern = draw_pattern((40, 48), acceleration=1, calibration=8)
    result = recover(undersample(planes, pattern), shift="none", tolerance=1e-6)
    np.testing.assert_allclose(result.image, planes, atol=2e-3)


def test_a_frozen_transform_with_full_sampling_is_soft_thresholding(planes):
    """With A unitary the optimum is one shrinkage of the coefficients (Donoho 1995)."""
    pattern = draw_pattern((40, 48), acceleration=1, calibration=8)
    acquisition = undersample(planes, pattern, sigma=0.05, seed=4)
    result = recover(
        acquisition, weight=2.0, wavelet="haar", levels=3, shift="none", tolerance=1e-9
    )
    noisy = recover(acquisition, "zero-filled").image
    for plane in range(4):
        bands = pywt.wavedec2(noisy[plane], "haar", mode="periodization", level=3)
        shrunk = [bands[0]] + [
            tuple(b * np.maximum(0, 1 - 0.1 / np.maximum(np.abs(b), 1e-12)) for b in level)
            for level in bands[1:]
        ]
        expected = pywt.waverec2(shrunk, "haar", mode="periodization")
        np.testing.assert_allclose(result.image[plane], expected, atol=1e-7)


def test_random_shifts_are_repeatable_and_say_they_are_not_certified(points):
    one, two = recover(points, shift="random"), recover(points, shift="random")
    np.testing.assert_array_equal(one.image, two.image)
    assert not one.certificate.certified
    assert one.certificate.objective is None
    assert "not certified: shifting objective" in one.certificate.note
    other = recover(points, shift="random", seed=1)
    assert np.abs(other.image - one.image).max() > 0


def test_recovers_better_than_zero_filled(planes, points):
    error = {
        method: np.linalg.norm(recover(points, method).image - planes)
        for method in ("zero-filled", "wavelet")
    }
    assert error["wavelet"] < 0.8 * error["zero-filled"]


def test_levels_and_padding():
    assert levels_for((256, 256)) == 4
    assert levels_for((91, 109)) == 4
    assert levels_for((12, 200)) == 1
    assert padded_shape((91, 109), 4) == (96, 112)
