"""Scores at odd scales and sizes, and of images that hold next to nothing."""

import numpy as np
import pytest

from mrics.quality import score
from mrics.quality.more_scores import more_scores_planes


def smooth(shape, seed=0):
    rng = np.random.default_rng(seed)
    y, x = np.mgrid[-1 : 1 : shape[1] * 1j, -1 : 1 : shape[2] * 1j]
    image = (x**2 + y**2 < 0.8) * (1 + 0.3 * np.cos(3 * y)) * np.exp(1j * (0.4 * x + 0.3 * y))
    noise = rng.standard_normal((2, *shape))
    return (image + 0.02 * (noise[0] + 1j * noise[1])).astype(np.complex64)


def every(image, reference, mask=None):
    found = dict(score(image, reference, mask))
    for plane, values in enumerate(more_scores_planes(image, reference, mask)):
        found |= {f"{name} {plane}": value for name, value in values.items()}
    return found


@pytest.mark.parametrize("scale", [1e-40, 1e-30, 1e-15, 1e15, 1e30, 1e37])
def test_scores_do_not_depend_on_the_scale(scale):
    image, reference = smooth((2, 44, 40), 1), smooth((2, 44, 40), 2)
    mask = np.abs(reference) > 0.3
    one = every(image, reference, mask)
    # A subnormal number of 1e-40 holds five digits.
    bound = 1e-3 if scale < 1e-38 else 2e-5
    other = every(image * np.float32(scale), reference * np.float32(scale), mask)
    for name, value in one.items():
        assert other[name] == pytest.approx(value, rel=bound), name


def test_single_and_double_precision_agree():
    image, reference = smooth((2, 44, 40), 1), smooth((2, 44, 40), 2)
    double = every(image.astype(np.complex128), reference.astype(np.complex128))
    for name, value in every(image, reference).items():
        assert double[name] == pytest.approx(value, rel=1e-5), name


SHAPES = [(1, 37, 41), (3, 43, 2), (1, 36, 1), (1, 44, 3), (2, 2, 2), (1, 1, 1), (1, 17, 16)]


@pytest.mark.parametrize("shape", SHAPES, ids=str)
def test_prime_odd_and_tiny_sizes(shape):
    found = every(smooth(shape, 1), smooth(shape, 2))
    assert all(value is None or np.isfinite(value) for value in found.values())


def test_one_voxel():
    reference = np.zeros((1, 44, 40), np.complex64)
    reference[0, 5, 5] = 1
    same = every(reference, reference)
    assert same["nrmse"] == 0
    assert same["ssim"] == 1
    assert same["psnr"] == np.inf
    lost = every(reference * 0, reference)
    assert lost["nrmse"] == lost["hfen"] == 1
    assert every(reference * 0, reference, np.abs(reference) > 0)["nrmse"] == 1


def test_a_flat_reference_has_no_detail_to_lose():
    flat = np.ones((1, 44, 40), np.complex64)
    assert score(flat, flat)["hfen"] == 0
    assert score(flat + smooth((1, 44, 40)), flat)["hfen"] == np.inf
