"""Cost of scores and measures; prints figures, asserts none.

Run with ``pytest tests/benchmarks/test_quality_cost.py -s``.
"""

import time

import numpy as np
import pytest
from skimage.metrics import structural_similarity
from timing import fastest

from mrics.encoding import undersample
from mrics.numerics import set_threads, threads
from mrics.quality import ideal_observer, measure, measures_from, score
from mrics.quality.observers.background import Spectrum
from mrics.quality.observers.tasks import Task
from mrics.quality.similarity import ssim_map
from mrics.recovery import recover
from mrics.sampling import draw_pattern

SHAPE = (8, 256, 256)


def stack():
    rng = np.random.default_rng(0)
    y, x = np.mgrid[-1 : 1 : SHAPE[1] * 1j, -1 : 1 : SHAPE[2] * 1j]
    body = np.hypot(x / 0.8, y / 0.85) < 0.9
    image = np.zeros(SHAPE, np.complex64)
    for plane in image:
        plane += body
        for _ in range(20):
            cy, cx = rng.uniform(-0.5, 0.5, 2)
            r, a = rng.uniform(0.03, 0.2), rng.uniform(-0.3, 0.3)
            plane += a * body * ((x - cx) ** 2 + (y - cy) ** 2 < r**2)
    return image * np.exp(1j * (x + y * y)).astype(np.complex64), np.broadcast_to(body, SHAPE)


def test_ssim_against_scikit_image(figure):
    image, body = stack()
    reference = np.abs(image).astype(float)
    rng = np.random.default_rng(1)
    found = np.abs(reference + 0.05 * rng.standard_normal(SHAPE))
    settings = {"gaussian_weights": True, "sigma": 1.5, "use_sample_covariance": False}
    pairs = list(zip(found, reference, strict=True))
    theirs = fastest(
        lambda: [
            structural_similarity(a, b, data_range=1.5, full=True, **settings) for a, b in pairs
        ]
    )
    ours = fastest(lambda: [ssim_map(a, b, 1.5) for a, b in pairs])
    everything = fastest(lambda: score(found, reference, body))
    figure("SSIM: scikit-image / ours, one thread", f"{theirs / ours:.1f}")
    figure("all scores / SSIM of scikit-image", f"{everything / theirs:.2f}")


@pytest.mark.parametrize("channels", [1, 8])
def test_ideal_observer(channels, figure):
    shape = SHAPE[1:]
    patterns = [draw_pattern(shape, acceleration=4, calibration=16, seed=s) for s in range(20)]
    kinds = ("detection", "two-against-one")
    tasks = [Task(kind, size) for size in (2.0, 3.0, 5.0) for kind in kinds]
    maps = None
    if channels > 1:
        y, x = np.mgrid[-1 : 1 : shape[0] * 1j, -1 : 1 : shape[1] * 1j]
        angles = 2 * np.pi * np.arange(channels) / channels
        maps = np.array(
            [np.exp(-((x - np.cos(a)) ** 2) - (y - np.sin(a)) ** 2 + 1j * a) for a in angles]
        )
    start = time.perf_counter()
    ideal_observer(
        patterns, tasks, shape, (1.0, 1.0), 0.1, Spectrum(50.0, 1 / 64, 3.0), sensitivities=maps
    )
    figure(
        f"ideal observer, 20 patterns x 6 tasks, 256 x 256, {channels} channels",
        f"{time.perf_counter() - start:.2f} s",
        "1 s" if channels == 1 else "20 s",
    )


@pytest.mark.parametrize("method", ["wavelet", "variation", "least-squares", "zero-filled"])
def test_measures_against_the_recoveries_they_need(method, figure):
    image, body = stack()
    held = undersample(image, draw_pattern(256, acceleration=3, calibration=20), sigma=0.03)
    wanted = measures_from(
        {
            "edges": True,
            "noise_replicas": 20,
            "resolution_runs": 4,
            "features": [{"size_mm": [2, 3, 4], "contrast": [10, 20]}],
            "observer_images": 100,
        }
    )
    found = recover(held, method).image

    def once():
        return measure(
            held, found, image, (3.0, 1.0, 1.0), method=method, measures=wanted, mask=body
        )

    once()
    result = once()
    ratio = result.seconds / result.recovery_seconds
    figure(
        f"all measures / the recoveries they need, {method}",
        f"{ratio:.2f} ({wanted.recoveries} recoveries of {wanted.planes} planes)",
        "3",
    )


def test_one_thread_scores(figure):
    image, body = stack()
    before = threads()
    set_threads(1)
    try:
        seconds = fastest(lambda: score(image, image, body))
        figure("all scores of 16 planes of 256 x 256, one thread", f"{seconds:.3f} s")
    finally:
        set_threads(before)
