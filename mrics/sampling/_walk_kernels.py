"""Compiled ordered pivotal sampling."""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.numerics.kernel_cache import numba

_ONE = 1 << 30


@numba.njit(nogil=True, cache=True)
def pivotal(quanta: Any, chance: Any) -> Any:  # pragma: no cover - compiled
    """Ordered pivotal sampling of probabilities in units of 2^-30 that sum to a whole number.

    Parameters
    ----------
    quanta : ndarray of int64
        Probabilities, each above 0 and below 1, in the order of the walk.
    chance : ndarray of float64
        One uniform number in [0, 1) per position.

    Returns
    -------
    ndarray of int64
        Indices taken.
    """
    taken = np.empty(quanta.size, dtype=np.int64)
    count = 0
    holder = -1
    held = 0
    for i in range(quanta.size):
        p = quanta[i]
        total = held + p
        if total < _ONE:
            if chance[i] * total >= held:
                holder = i
            held = total
        else:
            held_wins = chance[i] * (2 * _ONE - total) < _ONE - p
            taken[count] = holder if held_wins else i
            if held_wins:
                holder = i
            count += 1
            held = total - _ONE
    return taken[:count]
