"""Zero-filled and least-squares recoveries against linear algebra done by numpy."""

from dataclasses import replace

import numpy as np
import pytest
from conftest import blobs

from mrics.encoding import undersample
from mrics.numerics import centred_fft
from mrics.recovery import recover
from mrics.sampling import draw_pattern


def dense(pattern_mask, maps, shape):
    """The encoding of one plane as a matrix, built column by column from the definition."""
    columns = []
    for index in range(shape[0] * shape[1]):
        image = np.zeros(shape, complex)
        image.flat[index] = 1
        kspace = centred_fft(maps * image)
        columns.append((kspace * pattern_mask).ravel())
    return np.array(columns).T


@pytest.fixture
def case():
    """Two planes of 8 x 6 with three smooth sensitivities, R = 2 in 1-D."""
    rng = np.random.default_rng(5)
    shape = (8, 6)
    y, x = np.mgrid[-1:1:8j, -1:1:6j]
    maps = np.array([np.exp(-((x - a) ** 2) - (y - b) ** 2 + 1j * a * y) for a, b in
                     ((-1, 0.5), (1, 0), (0, -1))])  # fmt: skip
    image = rng.standard_normal((2, *shape)) + 1j * rng.standard_normal((2, *shape))
    pattern = draw_pattern((8,), acceleration=2, calibration=2, seed=2)
    acquisition = undersample(image, pattern, sigma=0.01, seed=1, sensitivities=maps[None])
    mask = pattern.mask[:, None]
    return acquisition, dense(mask, maps, shape)


def test_minimum_norm_solution_equals_pinv(case):
    """numpy.linalg.pinv gives the least-squares solution of minimum norm."""
    acquisition, matrix = case
    result = recover(acquisition, "least-squares", damping=0.0, tolerance=1e-10, iterations=500)
    expected = (np.linalg.pinv(matrix) @ acquisition.kspace.reshape(2, -1).T).T
    np.testing.assert_allclose(result.image.reshape(2, -1), expected, rtol=0, atol=1e-7)
    assert result.certificate.reached
    assert result.certificate.optimality < 1e-10


def test_one_channel_minimum_norm_is_zero_filled(lines):
    np.testing.assert_allclose(
        recover(lines, "least-squares").image, recover(lines, "zero-filled").image, atol=1e-12
    )


def test_damped_solution_equals_the_normal_equations(case):
    """Tikhonov: (A^H A + damping L) x = A^H y solved by numpy, L = max sum |S|^2."""
    acquisition, matrix = case
    bound = (np.abs(acquisition.sensitivities) ** 2).sum(1).max()
    result = recover(acquisition, "least-squares", damping=0.05, tolerance=1e-11)
    left = matrix.conj().T @ matrix + 0.05 * bound * np.eye(matrix.shape[1])
    expected = np.linalg.solve(left, matrix.conj().T @ acquisition.kspace.reshape(2, -1).T).T
    np.testing.assert_allclose(result.image.reshape(2, -1), expected, rtol=0, atol=1e-9)


def test_too_few_iterations_are_admitted(case):
    certificate = recover(case[0], "least-squares", iterations=2).certificate
    assert certificate.iterations == 2
    assert not certificate.reached
    assert certificate.optimality > certificate.tolerance


def test_fully_sampled_zero_filled_image_is_the_image(planes):
    pattern = draw_pattern((40,), acceleration=1, calibration=8)
    y, x = np.mgrid[-1:1:40j, -1:1:48j]
    maps = np.array([1 + x, 1 + y * 1j])[None]
    image = recover(undersample(planes, pattern, sensitivities=maps), "zero-filled").image
    np.testing.assert_allclose(image, planes, atol=1e-12)


@pytest.mark.parametrize("sigma", [0.02, 0.1])
def test_damping_follows_from_the_noise(sigma):
    """Eight channels at R = 4: near the best damping, where none amplifies the noise."""
    truth = blobs((2, 48, 40))
    angles = 2 * np.pi * np.arange(8) / 8
    y, x = np.mgrid[-1:1:48j, -1:1:40j]
    maps = np.exp(
        -((x - 1.1 * np.cos(angles)[:, None, None]) ** 2)
        - (y - 1.1 * np.sin(angles)[:, None, None]) ** 2
    )[None].astype(complex)
    pattern = draw_pattern((48,), acceleration=4, calibration=8, seed=1)
    held = undersample(truth, pattern, sigma=sigma, seed=2, sensitivities=maps)

    def error(damping):
        image = recover(held, "least-squares", damping=damping).image
        return float(np.sum(np.abs(image - truth) ** 2))

    found = recover(held, "least-squares").certificate
    assert found.weight_rule == "auto: noise over signal energy"
    assert found.reached
    tried = [error(found.weight * factor) for factor in (0.1, 0.3, 1, 3, 10)]
    assert error("auto") == pytest.approx(tried[2])
    assert tried[2] <= 1.35 * min(tried)
    assert tried[2] < 0.5 * error(0.0)
    scaled = replace(held, kspace=5j * held.kspace, sigma_added=5 * sigma)
    assert recover(scaled, "least-squares").certificate.weight == pytest.approx(found.weight)
