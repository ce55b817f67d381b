"""Cost of one iteration against its own FFT pairs: 16 planes of 256 x 256 complex64.

The measure is scipy.fft.fft2 and ifft2 with 2 workers on the same stack (times the channels), in
place: a fresh result each time would cost up to ten times as much in new memory pages alone.
Nothing is asserted.
"""

import numpy as np
import pytest
import scipy.fft
from timing import fastest

from mrics.encoding import undersample
from mrics.recovery import recover
from mrics.sampling import draw_pattern

PLANES, SIDE, ITERATIONS = 16, 256, 60


def stack():
    rng = np.random.default_rng(0)
    y, x = np.mgrid[-1 : 1 : SIDE * 1j, -1 : 1 : SIDE * 1j]
    image = np.zeros((PLANES, SIDE, SIDE), np.complex64)
    for plane in range(PLANES):
        for _ in range(20):
            cy, cx = rng.uniform(-0.6, 0.6, 2)
            r, a = rng.uniform(0.03, 0.3), rng.uniform(0.1, 0.5)
            image[plane] += a * ((x - cx) ** 2 + (y - cy) ** 2 < r**2)
    return image * np.exp(1j * (x + y * y)).astype(np.complex64)


def pair(channels):
    x = np.ones((PLANES * channels, SIDE, SIDE), np.complex64)

    def once():
        for transform in (scipy.fft.fft2, scipy.fft.ifft2):
            there = transform(x, norm="ortho", overwrite_x=True, workers=2)
            assert np.shares_memory(there, x)

    return fastest(once, 8)


def smooth_maps(channels):
    y, x = np.mgrid[-1 : 1 : SIDE * 1j, -1 : 1 : SIDE * 1j]
    angles = 2 * np.pi * np.arange(channels) / channels
    maps = np.array(
        [np.exp(-((x - np.cos(a)) ** 2) - (y - np.sin(a)) ** 2 + 1j * a) for a in angles]
    )
    return (maps / np.sqrt((np.abs(maps) ** 2).sum(0))).astype(np.complex64)[None]


CASES = [
    ("wavelet", {"shift": "none"}, 1),
    ("wavelet", {"shift": "none"}, 2),
    ("wavelet", {"shift": "random"}, 2),
    ("variation", {}, 2),
]


@pytest.mark.parametrize("channels", [1, 8])
@pytest.mark.parametrize(("method", "settings", "axes"), CASES)
def test_iteration_cost(method, settings, axes, channels, figure):
    pattern = draw_pattern((SIDE,) * axes, acceleration=4, calibration=24, seed=1)
    maps = smooth_maps(channels) if channels > 1 else None
    acquisition = undersample(stack(), pattern, sigma=0.01, sensitivities=maps)
    if "shift" not in settings or settings["shift"] != "random":
        settings = {**settings, "tolerance": 1e-12}

    def run(iterations):
        return recover(acquisition, method, weight=1.0, iterations=iterations, **settings)

    run(2)
    few = fastest(lambda: run(2), 3)
    many = fastest(lambda: run(2 + ITERATIONS), 3)
    one_pair = pair(channels)
    aims = {("wavelet", 1): "3.0", ("variation", 1): "2.5"}
    name = f"{method}, shift {settings['shift']}" if "shift" in settings else method
    figure(
        f"{name}: one iteration / its FFT pairs, {axes}-D pattern, {channels} channels",
        f"{(many - few) / (ITERATIONS * one_pair):.2f} (run of {ITERATIONS} with set-up: "
        f"{many / (ITERATIONS * one_pair):.2f})",
        aims.get((method, channels), "1.8"),
    )
