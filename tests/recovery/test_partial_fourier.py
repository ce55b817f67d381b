"""Partial Fourier: real objects exactly, smooth phases nearly, refusals."""

import numpy as np
import pytest
from receive import scene

from mrics.encoding import undersample
from mrics.errors import MricsError
from mrics.recovery import recover
from mrics.sampling import draw_pattern


def smooth_object(shape=(96, 64)):
    """Gaussian blobs, band-limited to well below k_max, with a slow phase."""
    y, x = np.meshgrid(*(np.linspace(-1, 1, n, endpoint=False) for n in shape), indexing="ij")
    image = np.zeros(shape)
    for cy, cx, width, height in ((0, 0, 0.3, 1), (0.4, -0.2, 0.08, 0.8), (-0.3, 0.3, 0.05, 1.2)):
        image += height * np.exp(-((y - cy) ** 2 + (x - cx) ** 2) / (2 * width**2))
    return image, np.exp(1j * (0.4 * y + 0.3 * x * y))


def error(image, reference):
    return np.linalg.norm(np.abs(image) - np.abs(reference)) / np.linalg.norm(reference)


def five_eighths(shape, fraction=0.625):
    return draw_pattern(
        shape, pattern="full", calibration=0, acceleration=1, partial_fourier=fraction
    )


@pytest.mark.parametrize("method", ["homodyne", "pocs"])
def test_a_real_object_loses_nothing(method):
    # Hermitian symmetry: of a real image either half of k-space determines the other
    # (Noll, Nishimura, Macovski 1991, IEEE TMI 10:154).
    image, _ = smooth_object()
    data = undersample(image[None].astype(complex), five_eighths((96,)))
    assert error(recover(data, "zero-filled").image, image[None]) > 1e-3
    assert error(recover(data, method).image, image[None]) < 1e-3


@pytest.mark.parametrize("method", ["homodyne", "pocs"])
@pytest.mark.parametrize("fraction", [0.625, 0.75, 0.875])
def test_a_smooth_phase_costs_little(method, fraction):
    _, phase = smooth_object()
    _, _, images = scene(96, 64)
    truth = (np.abs(images[0]) * phase)[None]
    data = undersample(truth, five_eighths((96,), fraction))
    zero = error(recover(data, "zero-filled").image, truth)
    assert error(recover(data, method).image, truth) < 0.6 * zero


def test_every_channel_counts():
    maps, _, images = scene(64, 48, channels=4)
    data = undersample(images, five_eighths((64,), 0.75), sensitivities=maps[None])
    zero = error(recover(data, "zero-filled").image, images)
    assert error(recover(data, "pocs").image, images) < zero


@pytest.mark.parametrize("method", ["homodyne", "pocs"])
def test_noise_of_a_complete_scan_passes_through(method):
    rng = np.random.default_rng(1)
    noise = (rng.standard_normal((1, 64, 48, 2)) @ [1, 1j]) + 20.0
    data = undersample(noise, five_eighths((64,), 1.0))
    np.testing.assert_allclose(np.abs(recover(data, method).image), np.abs(noise), rtol=0.1)


def test_patterns_that_are_no_partial_fourier_are_refused():
    image, _ = smooth_object()
    random = draw_pattern((96,), acceleration=2, calibration=16)
    data = undersample(image[None].astype(complex), random)
    with pytest.raises(MricsError, match="artial"):
        recover(data, "homodyne")


@pytest.mark.parametrize("fraction", [0.5, 1.1])
def test_fractions_without_a_symmetric_centre_are_refused(fraction):
    with pytest.raises(MricsError, match=r"partial_fourier|Partial Fourier|fraction"):
        five_eighths((96,), fraction)
