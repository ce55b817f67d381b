"""The phase-encode grid: coordinates, calibration block, shutter and partial Fourier.

A grid of N positions holds k = -N//2 ... N - N//2 - 1; zero frequency sits at index N//2.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import PatternError

Mask = NDArray[np.bool_]
Field = NDArray[np.float64]


def check_grid(shape: Any) -> tuple[int, ...]:
    """Grid shape as a tuple of one or two whole numbers of at least 2.

    Raises
    ------
    PatternError
        For other lengths, fractions or sizes below 2.
    """
    sizes = (shape,) if np.isscalar(shape) else tuple(shape)
    whole = all(isinstance(n, int | np.integer) and not isinstance(n, bool) for n in sizes)
    if len(sizes) not in (1, 2) or not whole or any(n < 2 for n in sizes):
        raise PatternError(
            f"The grid shape {shape!r} is not one or two whole numbers of at least 2.",
            "shape",
            "Give (phase steps,) for 1-D patterns, (phase steps, partition steps) for 2-D ones.",
        )
    return tuple(int(n) for n in sizes)


def signed_indices(length: int) -> NDArray[np.int64]:
    """K of every index: ``arange(length) - length // 2``."""
    return np.arange(length, dtype=np.int64) - length // 2


def radius(shape: tuple[int, ...], edge: float = 0.0) -> Field:
    """Normalised k-space radius sqrt(sum (k / (N/2 + edge))^2) of every position.

    Parameters
    ----------
    shape : tuple of int
        Grid shape.
    edge : float
        Added to N/2: 0 puts 1 at the nominal k_max, 0.5 at the outer border of the last cell.
    """
    square = np.zeros(shape)
    for axis, k in enumerate(axis_coordinates(shape, edge)):
        reshaped = [1] * len(shape)
        reshaped[axis] = -1
        square = square + (k**2).reshape(reshaped)
    return np.sqrt(square)


def axis_coordinates(shape: tuple[int, ...], edge: float = 0.0) -> list[Field]:
    """Per axis |k| / (N/2 + edge)."""
    return [np.abs(signed_indices(n)) / (n / 2 + edge) for n in shape]


def check_calibration(calibration: Any, shape: tuple[int, ...]) -> tuple[int, ...]:
    """Calibration size per axis; one number stands for every axis, 0 for none.

    Raises
    ------
    PatternError
        For fractions, negative sizes, a wrong number of sizes, or a block larger than the grid.
    """
    sizes: list[Any] = [calibration] * len(shape) if np.isscalar(calibration) else list(calibration)
    whole = all(isinstance(c, int | np.integer) and not isinstance(c, bool) for c in sizes)
    if len(sizes) != len(shape) or not whole or any(c < 0 for c in sizes):
        raise PatternError(
            f"The calibration size {calibration!r} is not a whole number, or one per axis, "
            "of at least 0.",
            "calibration",
            f"Give one whole number, or {len(shape)} for this grid.",
        )
    for axis, (size, n) in enumerate(zip(sizes, shape, strict=True)):
        if size > n:
            raise PatternError(
                f"A calibration region of {size} is larger than the grid's {n} positions.",
                f"calibration, axis {axis} of grid {shape}",
                f"Give at most {n}.",
            )
    if any(c == 0 for c in sizes):
        return (0,) * len(shape)
    return tuple(int(c) for c in sizes)


def calibration_block(shape: tuple[int, ...], calibration: tuple[int, ...]) -> Mask:
    """True on the central block: c positions from N//2 - c//2 on, on every axis."""
    block = np.zeros(shape, dtype=bool)
    if all(calibration):
        starts = [n // 2 - c // 2 for n, c in zip(shape, calibration, strict=True)]
        block[tuple(slice(s, s + c) for s, c in zip(starts, calibration, strict=True))] = True
    return block


def elliptical_shutter(shape: tuple[int, ...]) -> Mask:
    """True inside (k_u / (N_u/2))^2 + (k_v / (N_v/2))^2 <= 1; whole numbers decide, not rounding.

    On a 1-D grid every position is inside.
    """
    if len(shape) == 1:
        return np.ones(shape, dtype=bool)
    (nu, nv), ku, kv = shape, signed_indices(shape[0]), signed_indices(shape[1])
    inside = 4 * (ku * nv)[:, None] ** 2 + 4 * (kv * nu)[None, :] ** 2
    return np.asarray(inside <= (nu * nv) ** 2)


def check_partial_fourier(fraction: Any, shape: tuple[int, ...]) -> tuple[float, ...]:
    """Partial Fourier fraction per axis; one number acts on the phase axis.

    Raises
    ------
    PatternError
        Below 0.5 + 8/N (no symmetric centre is left to take the phase from) or above 1.
    """
    values: list[Any] = [fraction] if np.isscalar(fraction) else list(fraction)
    values = [*values, *([1.0] * (len(shape) - len(values)))]
    if len(values) != len(shape) or not all(_is_number(f) for f in values):
        raise PatternError(
            f"The partial Fourier fraction {fraction!r} is not one number, or one per axis.",
            "partial_fourier",
            f"Give a fraction for the phase axis, or {len(shape)} fractions for this grid.",
        )
    for axis, (value, n) in enumerate(zip(values, shape, strict=True)):
        least = 0.5 + 8 / n
        if value != 1 and not least <= value <= 1:
            raise PatternError(
                f"The partial Fourier fraction {value:g} is outside {least:g} ... 1: a symmetric "
                "centre of at least 16 lines must be left to take the phase from.",
                f"partial_fourier, axis {axis} of {n} positions",
                f"Give a fraction from {math.ceil(least * 1000) / 1000:g} to 1.",
            )
    return tuple(float(f) for f in values)


def partial_fourier_region(shape: tuple[int, ...], fraction: tuple[float, ...]) -> Mask:
    """True on the last round(f N) positions of every axis."""
    region = np.ones(shape, dtype=bool)
    for axis, (f, n) in enumerate(zip(fraction, shape, strict=True)):
        lines = [slice(None)] * len(shape)
        lines[axis] = slice(0, n - round(f * n))
        region[tuple(lines)] = False
    return region


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float | np.number) and not isinstance(value, bool)
