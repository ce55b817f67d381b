"""A smooth receive array and an object, for tests of several channels.

Loops outside the field of view with a 1/(a^2 + d^2)^(3/2) modulus and a phase that turns with
direction: smooth, all different, but simpler than the room's own field model, on which these tests
must not lean.
"""

import numpy as np

from mrics.sampling.pattern import Pattern
from mrics.sampling.regular import lattice


def loops(u, v, channels, radius=1.6, size=0.7):
    """Sensitivities (channel, u, v) and coordinates y, x from -1 to 1."""
    y, x = np.meshgrid(
        np.linspace(-1, 1, u, endpoint=False), np.linspace(-1, 1, v, endpoint=False), indexing="ij"
    )
    maps = []
    for turn in 2 * np.pi * np.arange(channels) / channels:
        dx, dy = x - radius * np.cos(turn), y - radius * np.sin(turn)
        distance = np.hypot(dx, dy)
        phase = np.arctan2(dy, dx) + 0.5 * distance
        maps.append((size**2 + distance**2) ** -1.5 * np.exp(1j * phase))
    return np.array(maps), y, x


def scene(u=64, v=64, channels=8, planes=1, normalised=True):
    """Sensitivities (channel, u, v), object mask (u, v) and complex images (plane, u, v)."""
    maps, y, x = loops(u, v, channels)
    if normalised:
        maps = maps / np.sqrt((np.abs(maps) ** 2).sum(axis=0))
    inside = (x / 0.75) ** 2 + (y / 0.85) ** 2 < 1
    texture = 1 + 0.3 * np.sin(9 * x) * np.cos(7 * y)
    hole = (x - 0.2) ** 2 + (y - 0.1) ** 2 < 0.04
    image = inside * texture * (1 - 0.8 * hole) * np.exp(1j * (x + 0.5 * y**2))
    return maps, inside, np.array([image * (1 + 0.1 * p) for p in range(planes)])


def regular(grid, steps, calibration=0, shift=0):
    """A lattice with a calibration region."""
    mask = lattice(grid, steps, shift)
    box = tuple(slice(n // 2 - calibration // 2, n // 2 + (calibration + 1) // 2) for n in grid)
    if calibration:
        mask[box] = True
    return Pattern(mask, calibration=(calibration,) * len(grid))
