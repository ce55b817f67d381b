"""From a law to inclusion probabilities that sum to the requested count.

Probabilities are whole numbers of 2^-30, so that sums and comparisons are exact and a seed gives
the same pattern on any machine.
"""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from mrics.errors import PatternError
from mrics.sampling.grid import Field, Mask

BITS = 30
ONE = 1 << BITS
Quanta = NDArray[np.int64]


def inclusion(
    density: Field,
    count: float,
    *,
    certain: Mask | None = None,
    allowed: Mask | None = None,
) -> Quanta:
    """Inclusion probabilities min(1, s * density) with s solved so that they sum to ``count``.

    Parameters
    ----------
    density : ndarray of float64
        Non-negative law, any scale, shape of the grid.
    count : float
        Expected number of acquired positions.
    certain : ndarray of bool, optional
        Positions of probability one whatever the law (calibration).
    allowed : ndarray of bool, optional
        Positions the sequence may acquire; others get probability zero.

    Returns
    -------
    ndarray of int64
        Probabilities in units of 2^-30; their sum is round(count * 2^30) exactly.

    Raises
    ------
    PatternError
        When the certain positions alone exceed the count, or fewer positions than the count have
        a density above zero; the largest or smallest feasible R is named.
    """
    certain = np.zeros(density.shape, dtype=bool) if certain is None else certain
    open_ = density > 0
    if allowed is not None:
        open_ = open_ & allowed
    open_ = open_ & ~certain
    fixed, free = int(certain.sum()), int(open_.sum())
    _check_feasible(count, fixed, free, density.size)
    quanta = np.zeros(density.size, dtype=np.int64)
    quanta[certain.ravel()] = ONE
    where = np.flatnonzero(open_.ravel())
    target = round(Fraction(count) * ONE) - fixed * ONE
    if where.size and target > 0:
        quanta[where] = _scaled(density.ravel()[where], target)
    return quanta.reshape(density.shape)


def _check_feasible(count: float, fixed: int, free: int, size: int) -> None:
    if round(count) < 1:
        raise PatternError(
            f"The requested acceleration leaves no position of {size}.",
            "acceleration",
            f"The largest feasible acceleration is {size}.",
        )
    if count < fixed:
        raise PatternError(
            f"The calibration region alone holds {fixed} positions, more than the {count:g} that "
            "the requested acceleration leaves.",
            f"acceleration and calibration on a grid of {size} positions",
            f"The largest feasible acceleration is {largest_feasible(size, fixed):g}; "
            "or make the calibration region smaller.",
        )
    if count > fixed + free:
        raise PatternError(
            f"Only {fixed + free} positions may be acquired (shutter, partial Fourier, law), "
            f"fewer than the {count:g} that the requested acceleration asks for.",
            f"acceleration on a grid of {size} positions",
            f"The smallest feasible acceleration is {smallest_feasible(size, fixed + free):g}; "
            "or open the shutter.",
        )


def largest_feasible(size: int, least: int) -> float:
    """Largest R, three decimals, whose count size/R is at least ``least``."""
    return math.floor(size * 1000 / least) / 1000


def smallest_feasible(size: int, most: int) -> float:
    """Smallest R, three decimals, whose count size/R is at most ``most``."""
    return math.ceil(size * 1000 / most) / 1000


def _scaled(density: Field, target: int) -> Quanta:
    """min(ONE, s d) as whole numbers that sum to ``target`` (largest remainders get the rest)."""
    order = np.argsort(-density, kind="stable")
    # below 1e-200 of the largest all densities are one: their scale must not overflow
    falling = np.maximum(density[order] / density[order[0]], 1e-200)
    tail = np.cumsum(falling[::-1])[::-1]  # sum of this and all smaller densities
    saturated = np.arange(density.size)
    scale = (target / ONE - saturated) / tail
    # the first count of saturated positions for which the next largest stays below one
    fits = np.flatnonzero((scale * falling <= 1) & (scale > 0))
    full = int(fits[0]) if fits.size else density.size
    quanta = np.full(density.size, ONE, dtype=np.int64)
    if full < density.size:
        exact = scale[full] * falling[full:] * ONE
        quanta[full:] = np.floor(exact).astype(np.int64)
        exact -= quanta[full:]
        _spread_rest(quanta[full:], exact, target - full * ONE)
    out = np.empty_like(quanta)
    out[order] = quanta
    return out


def _spread_rest(quanta: Quanta, remainder: Field, target: int) -> None:
    """Bring ``quanta`` to sum ``target``, one unit at a time, by largest remainder first."""
    rank = np.argsort(-remainder, kind="stable")
    rest = target - int(quanta.sum())
    while rest:
        room = (quanta < ONE) if rest > 0 else (quanta > 0)
        chosen = rank[room[rank]][: abs(rest)]
        quanta[chosen] += 1 if rest > 0 else -1
        rest = target - int(quanta.sum())
