"""Powers of two that keep squares and sums of very large or small values inside the type's range.

A power of two changes no digit, so what is computed on the scaled values and scaled back is the
same to the last bit. Values of a usual size are left alone.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

# Fourth powers, and sums of 10^9 squares, of what lies between stay inside single precision.
_LOW, _HIGH = 2.0**-30, 2.0**40


def largest_part(values: NDArray[Any]) -> float:
    """Largest real or imaginary part, as a magnitude; 0 for an empty array."""
    if values.size == 0:
        return 0.0
    parts = (values.real, values.imag) if np.iscomplexobj(values) else (values,)
    return max(max(float(part.max()), -float(part.min())) for part in parts)


def exponent_for(largest: float) -> int:
    """K such that ``largest * 2**k`` is of a usual size; 0 where it is already, or is 0."""
    if largest == 0 or _LOW <= largest <= _HIGH or not math.isfinite(largest):
        return 0
    return -math.frexp(largest)[1]


def times_power_of_two(values: NDArray[Any], exponent: int) -> NDArray[Any]:
    """``values * 2**exponent`` of the same type; the array itself where the exponent is 0."""
    if exponent == 0:
        return values
    if not np.iscomplexobj(values):
        return np.asarray(np.ldexp(values, exponent), dtype=values.dtype)
    out = np.empty_like(values)
    out.real = np.ldexp(values.real, exponent)
    out.imag = np.ldexp(values.imag, exponent)
    return out


def usual_size(values: NDArray[Any]) -> tuple[NDArray[Any], int]:
    """The values brought to a usual size, and the exponent of 2 that did it."""
    exponent = exponent_for(largest_part(values))
    return times_power_of_two(values, exponent), exponent
