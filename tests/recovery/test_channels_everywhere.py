"""Every recovery of the registry on several channels: known maps, estimated maps, scaling."""

from dataclasses import replace

import numpy as np
import pytest
from receive import regular, scene

from mrics.encoding import undersample
from mrics.recovery import METHODS, recover
from mrics.sampling import draw_pattern

PSI = np.eye(6) + 0.3 * (np.eye(6, k=1) + np.eye(6, k=-1))
#: settings that keep a test short; whatever is not here runs as it comes
SHORT = {
    "dictionary": {"source": "dct", "iterations": 1, "stride": 4, "start": "zero-filled"},
    "low-rank": {"weight": 0.1, "iterations": 30},
    "variation": {"weight": 1.0, "tolerance": 1e-2},
    "wavelet": {"weight": 1.0},
    "wavelet+variation": {"weight": 1.0, "iterations": 30},
}
PARTIAL = ("homodyne", "pocs")


def acquired(method):
    maps, inside, images = scene(48, 40, channels=6, planes=2)
    pattern = regular((48,), (2,), 16)
    if method in PARTIAL:
        pattern = draw_pattern(
            (48,), pattern="full", calibration=0, acceleration=1, partial_fourier=0.75
        )
        pattern = replace(pattern, calibration=(16,))
    data = undersample(images, pattern, 0.005, 1, sensitivities=maps[None], covariance=PSI)
    if method == "low-rank":  # the two planes as frames of one
        data = replace(data, volume_shape=(40, 48, 1, 2))
    return data, images, inside


def error(image, truth, where):
    """Of magnitudes: the phase of estimated maps is free."""
    gap = (np.abs(image) - np.abs(truth))[:, where]
    return np.linalg.norm(gap) / np.linalg.norm(truth[:, where])


@pytest.mark.parametrize("method", sorted(METHODS))
def test_known_and_estimated_maps(method):
    data, truth, inside = acquired(method)
    # Maps of unit norm over whitened channels, so that both images have one scale.
    whitened = np.linalg.solve(np.linalg.cholesky(PSI), data.sensitivities[0].reshape(6, -1))
    norm = np.sqrt((np.abs(whitened) ** 2).sum(axis=0)).reshape(48, 40)
    known = recover(data, method, **SHORT.get(method, {})).image
    guessed = recover(replace(data, sensitivities=None), method, **SHORT.get(method, {})).image
    plain = recover(data, "zero-filled").image
    bound = error(plain, truth, inside)
    limit = bound if method == "zero-filled" else 0.75 * bound
    assert error(known, truth, inside) <= limit
    assert error(guessed / norm, truth, inside) <= limit + 0.02


@pytest.mark.parametrize("method", sorted(METHODS))
def test_scaling_and_types(method):
    data, _, _ = acquired(method)
    short = SHORT.get(method, {})
    factor = 2e5 * np.exp(1.1j)
    one = recover(data, method, **short).image
    scaled = replace(data, kspace=factor * data.kspace, sigma_added=abs(factor) * 0.005)
    two = recover(scaled, method, **short).image
    np.testing.assert_allclose(two, factor * one, atol=1e-7 * abs(factor) * np.abs(one).max())
    assert one.dtype == np.complex128
    single = replace(data, kspace=data.kspace.astype(np.complex64))
    single = recover(single, method, **short).image
    assert single.dtype == np.complex64
    assert np.linalg.norm(single - one) < 1e-3 * np.linalg.norm(one)
