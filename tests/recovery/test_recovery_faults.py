"""Every recovery of the registry at odd scales, sizes and precisions; no warning is let through."""

from dataclasses import replace

import numpy as np
import pytest
from invented_planes import blobs

from mrics.encoding import undersample
from mrics.errors import PatternError, RecoveryError
from mrics.recovery import METHODS, recover
from mrics.sampling import draw_pattern

REGULAR = {"pattern": "equispaced", "acceleration": 2, "calibration": 0}
PATTERNS = {
    "unfold": REGULAR,
    "kernel": {**REGULAR, "calibration": 12},
    "homodyne": {"pattern": "full", "partial_fourier": 0.75, "calibration": 0, "acceleration": 1},
}
PATTERNS["pocs"] = PATTERNS["homodyne"]
QUICK = {
    "dictionary": {"iterations": 1, "patch": 4, "source": "dct", "start": "zero-filled"},
    "wavelet": {"iterations": 15},
    "variation": {"iterations": 15},
    "wavelet+variation": {"iterations": 15},
    "least-squares": {"iterations": 15},
    "low-rank": {"iterations": 5},
}
CHANNELS = ("unfold", "kernel")
# Largest difference between single and double precision, relative to the largest magnitude;
# measured, with a margin of 10 and more. Unfolding divides by small eigenvalues.
PRECISION = dict.fromkeys(METHODS, 1e-4)


def receive(shape):
    """Four smooth sensitivities, from the four sides."""
    y, x = np.mgrid[-1 : 1 : shape[1] * 1j, -1 : 1 : shape[2] * 1j]
    sides = ((-1, 0), (1, 0), (0, 1), (0, -1))
    maps = np.array([np.exp(-((y - a) ** 2) - (x - b) ** 2 + 1j * (a * x + b)) for a, b in sides])
    return np.broadcast_to(maps / np.sqrt((abs(maps) ** 2).sum(0)), (shape[0], *maps.shape))


def acquired(method, image, sigma=0.02):
    """One acquisition that the method takes, in double precision."""
    entry = {"acceleration": 2, "calibration": 8, **PATTERNS.get(method, {})}
    if method == "low-rank":
        entry["frames"] = image.shape[0]
    pattern = draw_pattern((image.shape[1],), seed=1, **entry)
    maps = receive(image.shape) if method in CHANNELS else None
    return undersample(image, pattern, sigma=sigma, seed=2, sensitivities=maps, sigma_scan=0.0)


def solved(method, acquisition):
    return recover(acquisition, method, **QUICK.get(method, {})).image


def single(acquisition):
    maps = acquisition.sensitivities
    return replace(
        acquisition,
        kspace=acquisition.kspace.astype(np.complex64),
        sensitivities=None if maps is None else maps.astype(np.complex64),
    )


@pytest.mark.parametrize("method", METHODS)
def test_scales_from_the_smallest_to_the_largest(method):
    acquisition = single(acquired(method, blobs((2, 44, 40))))
    image = solved(method, acquisition)
    for exponent in (100, -126):
        other = solved(method, acquisition.at_scale(exponent))
        again = np.ldexp(np.abs(other).astype(np.float64), -exponent)
        # 2^-126 times these values leaves few digits of a subnormal number.
        bound = 1e-5 if exponent > -126 else 1e-3
        assert np.abs(again - np.abs(image)).max() <= bound * np.abs(image).max()


@pytest.mark.parametrize("method", METHODS)
def test_single_precision_is_as_good_as_its_bound(method):
    acquisition = acquired(method, blobs((2, 44, 40)))
    double = solved(method, acquisition)
    assert double.dtype == np.complex128
    gap = np.abs(solved(method, single(acquisition)) - double).max() / np.abs(double).max()
    assert gap <= PRECISION[method]


@pytest.mark.parametrize("method", METHODS)
def test_one_voxel_without_noise(method):
    image = np.zeros((2, 44, 40), np.complex64)
    image[0, 20, 17] = 1
    image[1, 20, 17] = 0.5
    found = solved(method, acquired(method, image, sigma=0.0))
    assert np.isfinite(found).all()
    assert np.unravel_index(np.abs(found).argmax(), found.shape) == (0, 20, 17)


SHAPES = [(1, 37, 41), (3, 43, 2), (1, 36, 1), (1, 34, 33), (2, 2, 2)]


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("shape", SHAPES, ids=str)
def test_prime_odd_and_tiny_sizes_are_recovered_or_refused(method, shape):
    try:
        found = solved(method, single(acquired(method, blobs(shape))))
    except (PatternError, RecoveryError):
        # Refused with a reason, which is not a fault.
        return
    assert found.shape == shape
    assert np.isfinite(found).all()
