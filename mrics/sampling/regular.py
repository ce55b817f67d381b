"""Regular patterns: every n-th line, and lattices shifted from line to line."""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.errors import PatternError
from mrics.sampling.grid import Mask, signed_indices


def lattice(shape: tuple[int, ...], steps: tuple[int, ...], shift: int = 0) -> Mask:
    """Every ``steps``-th position through zero frequency, partitions shifted from line to line.

    On the n-th acquired phase line (n = 0 at k = 0) the acquired partitions are those with
    k = n * shift modulo the partition step (Breuer et al. 2006, MRM 55:549-556).
    """
    ku = signed_indices(shape[0])
    lines = ku % steps[0] == 0
    if len(shape) == 1:
        return np.asarray(lines)
    kv = signed_indices(shape[1])
    start = (ku // steps[0]) * shift
    return np.asarray(lines[:, None] & ((kv[None, :] - start[:, None]) % steps[1] == 0))


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
