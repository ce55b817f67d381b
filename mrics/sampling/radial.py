"""Golden-angle spokes and spiral arms, rounded to the (phase, partition) grid."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from itertools import count
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import PatternError
from mrics.sampling.grid import Mask

Path = NDArray[np.int64]  # flat positions in the order they are played


def golden_angle(order: int = 1) -> float:
    """Angle in degrees between successive spokes: 180/(phi + order - 1), phi the golden ratio.

    Order 1 is 111.246 deg (Winkelmann et al. 2007, IEEE Trans Med Imaging 26:68-76); higher orders
    are the small angles of Wundrak et al. 2016 (MRM 75:2372-2378).
    """
    return 180.0 / ((1 + 5**0.5) / 2 + order - 1)


def spoke(shape: tuple[int, int], angle_deg: float) -> Path:
    """Positions on a diametral spoke of the inscribed ellipse, from -k_max to k_max."""
    steps = np.arange(max(shape)) - max(shape) // 2
    along = steps / (max(shape) / 2)
    return _rounded(shape, along * np.cos(np.radians(angle_deg)), along * _sin(angle_deg))


def spiral_arm(shape: tuple[int, int], angle_deg: float, turns: float) -> Path:
    """Positions on an Archimedean arm r = t, angle = angle_deg + 360 turns t, from the centre."""
    points = int(np.ceil(2 * max(shape) * (1 + 2 * np.pi * turns)))
    t = np.linspace(0.0, 1.0, points)
    angle = np.radians(angle_deg) + 2 * np.pi * turns * t
    return _rounded(shape, t * np.cos(angle), t * np.sin(angle))


def _sin(angle_deg: float) -> float:
    return float(np.sin(np.radians(angle_deg)))


def _rounded(shape: tuple[int, int], x: NDArray[Any], y: NDArray[Any]) -> Path:
    """Grid positions nearest to points of normalised k-space, each once, in order."""
    # 1e-9 of a step settles ties alike on every machine
    u = np.floor(x * shape[0] / 2 + 0.5 + 1e-9).astype(np.int64) + shape[0] // 2
    v = np.floor(y * shape[1] / 2 + 0.5 + 1e-9).astype(np.int64) + shape[1] // 2
    inside = (u >= 0) & (u < shape[0]) & (v >= 0) & (v < shape[1])
    flat = u[inside] * shape[1] + v[inside]
    _, first = np.unique(flat, return_index=True)
    return flat[np.sort(first)]


def played(
    shape: tuple[int, ...],
    target: int,
    path: Callable[[float], Path],
    *,
    angle_deg: float,
    first: int = 0,
    allowed: Mask,
    calibration: Mask,
) -> tuple[Mask, NDArray[np.int64], int]:
    """Whole spokes or arms, as many as bring the count nearest to ``target``.

    Parameters
    ----------
    shape : tuple of int
        Grid.
    target : int
        Positions wanted, calibration included.
    path : callable
        Positions of a spoke or arm at an angle in degrees.
    angle_deg : float
        Turn from one to the next: :func:`golden_angle` for spokes, which come back on themselves
        after half a turn, twice that for arms.
    first : int
        Number of the first spoke (later frames go on where the frame before ended).
    allowed, calibration : ndarray of bool
        Shutter; block acquired in shots of its own before the spokes, line by line.

    Returns
    -------
    mask : ndarray of bool
    order : ndarray of int64, shape (acquired, 2)
        (shot, echo) of ``numpy.argwhere(mask)``; a position belongs to the first shot that
        crosses it.
    number : int
        Spokes or arms played.

    Raises
    ------
    PatternError
        When the calibration alone exceeds the target, or all angles together fall short of it.
    """
    shots: list[Path] = [
        u * shape[1] + np.flatnonzero(row) for u, row in enumerate(calibration) if row.any()
    ]
    mask = calibration.copy().ravel()
    held = int(mask.sum())
    if held > target:
        raise PatternError(
            f"The calibration region alone holds {held} positions, more than the {target} that "
            "the requested acceleration leaves.",
            "acceleration and calibration",
            f"The largest feasible acceleration is {mask.size / held:.5g}.",
        )
    number = 0
    for new in _new_positions(path, angle_deg, first, mask, allowed.ravel()):
        if held and held + len(new) - target > target - held:
            break
        mask[new] = True
        held += len(new)
        shots.append(new)
        number += 1
        if number > 8 * max(shape):
            raise PatternError(
                f"The spokes or arms cover {held} positions, not the {target} asked for.",
                "acceleration",
                f"The smallest feasible acceleration is about {mask.size / held:.3g}.",
            )
    order = np.zeros((mask.size, 2), dtype=np.int64)
    for shot, positions in enumerate([s for s in shots if len(s)]):
        order[positions] = np.stack([np.full(len(positions), shot), np.arange(len(positions))], 1)
    return mask.reshape(shape), order[mask], number


def _new_positions(
    path: Callable[[float], Path], turn: float, first: int, mask: NDArray[np.bool_], allowed: Any
) -> Iterator[Path]:
    for spoke_number in count(first):
        positions = path((spoke_number * turn) % 360.0)
        yield positions[allowed[positions] & ~mask[positions]]
