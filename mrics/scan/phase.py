"""Phase images: how their numbers become radians."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import ScanError

# Slack for rounding at the ends of a radian range.
SLACK_RAD = 0.01
# An integer scale is believed only if the values reach this share of each end.
FILLED = 0.98
_MILLIRADIANS = (3100.0, 3142.0)


def phase_scale(values: NDArray[Any], where: str) -> float:
    """Radians per unit of a phase image.

    The rule, applied to the values after the header's slope and intercept:

    * all within -pi ... pi or 0 ... 2 pi (0.01 rad slack): radians, factor 1;
    * whole numbers that reach both ends of -H ... H with H a power of two from 128 to 32768
      (for example -4096 ... 4094 or -2048 ... 2047): factor pi / H;
    * whole numbers from 0 up to T with T a power of two from 256 to 65536 (for example
      0 ... 4095): factor 2 pi / T;
    * whole numbers that reach both ends of -3142 ... 3142: milliradians.

    "Reach" means to 2 %, which noise in air always does; anything else is refused, because a
    guessed factor would wrap the phase wrongly.

    Parameters
    ----------
    values : ndarray of float32
        Phase image.
    where : str
        The file, for the error.

    Raises
    ------
    ScanError
        The range fits no rule.
    """
    low, high = float(values.min()), float(values.max())
    if -math.pi - SLACK_RAD <= low and high <= math.pi + SLACK_RAD:
        return 1.0
    if low >= -SLACK_RAD and high <= 2 * math.pi + SLACK_RAD:
        return 1.0
    if bool(np.array_equal(values, np.rint(values))):
        reach = max(-low, high)
        if low < 0 and min(-low, high) >= _MILLIRADIANS[0] and reach <= _MILLIRADIANS[1]:
            return 1e-3
        full = 2.0 ** math.ceil(math.log2(reach))
        if low < 0 and min(-low, high) >= FILLED * full and 128 <= full <= 32768:
            return math.pi / full
        if low >= 0 and high >= FILLED * full and 256 <= full <= 65536:
            return 2 * math.pi / full
    raise ScanError(
        f"The phase runs from {low:g} to {high:g}, outside the ranges that can be told.",
        where,
        "Give radians (-pi to pi or 0 to 2 pi), or whole numbers over a full turn such as "
        "0 to 4095 or -4096 to 4094.",
    )
