"""Regular patterns: every n-th line, and lattices shifted from line to line."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import PatternError
from mrics.sampling.grid import Mask, signed_indices


def lattice(shape: tuple[int, ...], steps: tuple[int, ...], shift: int = 0, frame: int = 0) -> Mask:
    """Every ``steps``-th position through zero frequency, partitions shifted from line to line.

    On the n-th acquired phase line (n = 0 at k = 0) the acquired partitions are those with
    k = n * shift modulo the partition step (Breuer et al. 2006, MRM 55:549-556). Frame f is moved
    by f phase lines modulo the step, and by one partition more after every cycle of lines, so that
    as many frames as the acceleration cover the grid once.
    """
    ku = signed_indices(shape[0]) - frame % steps[0]
    lines = ku % steps[0] == 0
    if len(shape) == 1:
        return np.asarray(lines)
    kv = signed_indices(shape[1]) - frame // steps[0]
    start = (ku // steps[0]) * shift
    return np.asarray(lines[:, None] & ((kv[None, :] - start[:, None]) % steps[1] == 0))


def check_shift(shift: Any) -> int:
    """The partition shift per acquired line as a whole number."""
    if not isinstance(shift, int | np.integer) or isinstance(shift, bool):
        raise PatternError(
            f"The shift {shift!r} is not a whole number.",
            "shift of the pattern 'shifted lattice'",
            "Give how many partitions each acquired line is moved by, such as 1.",
        )
    return int(shift)


def alias_positions(
    shape: tuple[int, ...], steps: tuple[int, ...], shift: int = 0
) -> NDArray[np.float64]:
    """Where a lattice puts the aliases of a point, in voxels from it (the reciprocal lattice).

    Returns
    -------
    ndarray of float64, shape (R, number of axes)
        One row per alias, the point itself first, each coordinate in [-N/2, N/2).
    """
    n = np.array(shape, dtype=float)
    turns = np.indices(steps).reshape(len(steps), -1).T / np.array(steps)
    if len(steps) == 2:
        # a cell of the lattice is spanned by (step_u, shift) and (0, step_v)
        turns[:, 0] -= shift * turns[:, 1] / steps[0]
    return ((turns + 0.5) % 1.0 - 0.5) * n


def lattice_steps(
    shape: tuple[int, ...], acceleration: float | None, steps: Any = None
) -> tuple[int, ...]:
    """Lattice step per axis: ``steps`` if given, else all of the acceleration along the phase axis.

    Raises
    ------
    PatternError
        For steps that are not whole, exceed the grid or do not multiply to the acceleration.
    """
    if steps is None:
        steps = [acceleration, *([1] * (len(shape) - 1))]
    values: list[Any] = [steps] if np.isscalar(steps) else list(steps)
    whole = all(isinstance(s, int | float | np.number) and float(s).is_integer() for s in values)
    if len(values) != len(shape) or not whole or any(s < 1 for s in values):
        raise PatternError(
            f"The lattice steps {values!r} are not one whole number of at least 1 per axis.",
            "acceleration or steps of a regular pattern",
            "Give a whole acceleration, or steps such as [2, 2].",
        )
    result = tuple(int(s) for s in values)
    product = int(np.prod(result))
    if acceleration is not None and product != acceleration:
        raise PatternError(
            f"The lattice steps {list(result)} multiply to {product}, not to the acceleration "
            f"{acceleration:g}.",
            "acceleration and steps of a regular pattern",
            f"Give acceleration = {product}, or other steps.",
        )
    for axis, (s, n) in enumerate(zip(result, shape, strict=True)):
        if s > n // 2:
            raise PatternError(
                f"A lattice step of {s} leaves fewer than two lines of {n}.",
                f"acceleration or steps, axis {axis} of grid {shape}",
                f"The largest feasible step is {n // 2}.",
            )
    return result
