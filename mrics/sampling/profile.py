"""Radial inclusion profile: how often positions of each radius are acquired, beside the law."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from mrics.errors import PatternError
from mrics.sampling.grid import Field, calibration_block, radius
from mrics.sampling.pattern import Pattern


@dataclass(frozen=True)
class RadialProfile:
    """Rings of normalised k-space radius, calibration left out.

    Attributes
    ----------
    radius : ndarray of float64, shape (rings,)
        Middle of every ring; 1 is the end of the grid along an axis.
    law : ndarray of float64
        Mean inclusion probability of the ring's positions.
    found : ndarray of float64
        Share of them acquired, over all patterns and frames.
    expected : ndarray of float64
        Acquired positions per pattern that the law expects in the ring.
    """

    radius: Field
    law: Field
    found: Field
    expected: Field

    def deviation(self, least_share: float = 0.01) -> float:
        """Largest |found/law - 1| over rings that hold this share of the expected positions."""
        held = self.expected >= least_share * self.expected.sum()
        return float(np.abs(self.found[held] / self.law[held] - 1).max())


def radial_profile(patterns: Pattern | Sequence[Pattern], rings: int = 12) -> RadialProfile:
    """Profile of one pattern, or the mean over draws of one law on one grid.

    Parameters
    ----------
    patterns : Pattern or sequence of Pattern
        Random patterns that share law, grid and calibration.
    rings : int
        Rings from radius 0 to 1, outer border included; corners beyond go on in like rings.

    Raises
    ------
    PatternError
        For regular patterns, which have no law.
    """
    draws = [patterns] if isinstance(patterns, Pattern) else list(patterns)
    first = draws[0]
    if first.probability is None:
        raise PatternError(
            "A regular pattern has no law to compare with.",
            f"pattern {first.settings.get('pattern', '')!r}",
            "Ask for the radial profile of random patterns.",
        )
    p = first.probability[0] if first.frames else first.probability
    ring = np.floor(radius(first.grid) * rings * (1 - 1e-9)).astype(np.int64)
    free = ~calibration_block(first.grid, first.calibration)
    found = np.mean([q.mask.reshape(-1, *q.grid).mean(axis=0) for q in draws], axis=0)
    number = int(ring.max()) + 1

    def total(values: Field) -> Field:
        sums = np.bincount(ring[free], weights=values[free], minlength=number)
        return sums.astype(np.float64)

    size, expected, acquired = total(np.ones(first.grid)), total(p), total(found)
    filled = size > 0
    return RadialProfile(
        radius=((np.arange(number) + 0.5) / rings)[filled],
        law=(expected / np.maximum(size, 1))[filled],
        found=(acquired / np.maximum(size, 1))[filled],
        expected=expected[filled],
    )
