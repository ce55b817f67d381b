"""Approximate signed distances (mm, negative inside) from which the invented anatomy is built."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[Any]
Point = tuple[float, float, float]
Node = tuple[Point, float]


def ellipsoid(x: Array, y: Array, z: Array, centre: Point, half_axes: Point) -> Array:
    """First-order distance to an ellipsoid: exact at its surface."""
    px, py, pz = x - centre[0], y - centre[1], z - centre[2]
    a, b, c = (np.float32(v) for v in half_axes)
    near = np.sqrt((px / a) ** 2 + (py / b) ** 2 + (pz / c) ** 2)
    slope = np.sqrt((px / a**2) ** 2 + (py / b**2) ** 2 + (pz / c**2) ** 2)
    return near * (near - 1.0) / (slope + np.float32(1e-6))


def tube(
    x: Array, y: Array, z: Array, nodes: Sequence[Node], squash: Point = (1.0, 1.0, 1.0)
) -> Array:
    """Distance to a chain of round cones through ``nodes`` (point, radius).

    ``squash`` stretches space before the distance is taken, for flat bands: a factor above 1
    along an axis makes the tube thinner there; the result is divided by the local stretch, so it
    stays a first-order distance.
    """
    stretch = np.asarray(squash, dtype=np.float32)
    px, py, pz = x * stretch[0], y * stretch[1], z * stretch[2]
    best: Array | None = None
    for (start, r0), (end, r1) in pairwise(nodes):
        a = np.asarray(start, dtype=np.float32) * stretch
        d = np.asarray(end, dtype=np.float32) * stretch - a
        qx, qy, qz = px - a[0], py - a[1], pz - a[2]
        along = np.clip((qx * d[0] + qy * d[1] + qz * d[2]) / np.sum(d * d), 0.0, 1.0)
        qx, qy, qz = qx - along * d[0], qy - along * d[1], qz - along * d[2]
        away = np.sqrt(qx * qx + qy * qy + qz * qz)
        part = away - (np.float32(r0) + along * np.float32(r1 - r0))
        if max(squash) != min(squash):
            scaled = (qx * stretch[0]) ** 2 + (qy * stretch[1]) ** 2 + (qz * stretch[2]) ** 2
            part = part * (away + np.float32(1e-3)) / np.sqrt(scaled + np.float32(1e-6))
        best = part if best is None else np.minimum(best, part)
    assert best is not None
    return best


def join(first: Array, second: Array, blend: float) -> Array:
    """Union with a fillet of about ``blend`` mm."""
    h = np.clip(0.5 + 0.5 * (second - first) / np.float32(blend), 0.0, 1.0)
    return second + h * (first - second) - np.float32(blend) * h * (1.0 - h)


def cut(body: Array, tool: Array, blend: float) -> Array:
    """``body`` less ``tool`` with a rounded edge."""
    return -join(-body, tool, blend)


def ramp(value: Array, low: float, high: float) -> Array:
    """0 below ``low``, 1 above ``high``, smooth between (falls where ``high`` < ``low``)."""
    t = np.clip((value - np.float32(low)) / np.float32(high - low), 0.0, 1.0)
    return t * t * (3.0 - 2.0 * t)


def fill(distance: Array, edge_mm: float = 0.5) -> Array:
    """Share of tissue in a small cell around each point: 1 well inside, 0 outside."""
    return np.clip(0.5 - distance / np.float32(edge_mm), 0.0, 1.0)
