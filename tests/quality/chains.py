"""Small acquisitions for tests of measures that run recoveries."""

import numpy as np

from mrics.encoding import undersample
from mrics.sampling import Pattern, draw_pattern


def phantom(shape=(2, 64, 48), dtype=np.complex128, seed=0):
    """A smooth body with blobs and a smooth phase, no noise."""
    rng = np.random.default_rng(seed)
    planes, u, v = shape
    y, x = np.meshgrid(np.linspace(-1, 1, u), np.linspace(-1, 1, v), indexing="ij")
    body = 1.0 / (1.0 + np.exp((np.hypot(x / 0.8, y / 0.85) - 1.0) * 40))
    stack = []
    for _ in range(planes):
        image = body.copy()
        for _ in range(6):
            cy, cx = rng.uniform(-0.5, 0.5, 2)
            size = rng.uniform(0.05, 0.2)
            image += (
                0.4
                * rng.uniform(-1, 1)
                * body
                * np.exp(-((y - cy) ** 2 + (x - cx) ** 2) / (2 * size**2))
            )
        stack.append(image * np.exp(1j * (0.8 * x + 0.5 * y**2)))
    return np.array(stack, dtype=dtype)


def body(shape=(2, 64, 48)):
    _, u, v = shape
    y, x = np.meshgrid(np.linspace(-1, 1, u), np.linspace(-1, 1, v), indexing="ij")
    return np.broadcast_to(np.hypot(x / 0.8, y / 0.85) < 0.9, shape).copy()


def coils(u, v, channels=4, dtype=np.complex128):
    """Smooth sensitivities around the plane, (1, channels, u, v)."""
    y, x = np.meshgrid(np.linspace(-1, 1, u), np.linspace(-1, 1, v), indexing="ij")
    maps = []
    for c in range(channels):
        angle = 2 * np.pi * c / channels
        near = np.hypot(y - 1.2 * np.sin(angle), x - 1.2 * np.cos(angle))
        maps.append(np.exp(-(near**2) / 1.5) * np.exp(1j * (angle + 0.4 * x * np.sin(angle))))
    return np.array(maps, dtype=dtype)[None]


def full(shape):
    """A pattern that acquires everything."""
    return Pattern(np.ones(shape, dtype=bool), calibration=(0,) * len(shape))


def acquire(image, pattern=None, sigma=0.02, **more):
    """The phantom undersampled threefold along u, unless a pattern is given."""
    if pattern is None:
        pattern = draw_pattern(image.shape[1], acceleration=3, calibration=8, seed=3)
    return undersample(image, pattern, sigma=sigma, seed=5, **more)
