"""Variable-density Poisson-disc draws on a 2-D grid.

Two acquired positions i, j outside the calibration block are at least min(r_i, r_j) apart, with
r(k) = c / sqrt(p(k)). On a grid a rule can only forbid whole sets of neighbours (r up to 1 none,
up to sqrt 2 the four nearest, ...), so how many positions fit is a staircase in c, and a c that
fills the outer grid starves places whose p lies just past a stair. The law therefore leads: bands
of like p take positions until each has its expected number, and c is the largest for which every
band gets there within :data:`SLACK`. The spacing idea is Cook 1986 (ACM Trans Graph 5:51-72).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from mrics.errors import PatternError
from mrics.sampling.draws import bernoulli, shuffle
from mrics.sampling.grid import Field, Mask
from mrics.sampling.probability import ONE, Quanta

SLACK = 0.05
_OFFERS = 16  # candidates per expected position: keeps the work linear in grid positions
_BAND_POSITIONS = 12
_BANDS = 64
_HALVINGS = 10
_LARGEST_C = 1.125  # above the hexagonal limit sqrt(2 / sqrt 3) = 1.0746


@dataclass(frozen=True)
class DiscDraw:
    """A Poisson-disc draw: the mask and the constant c of its radii."""

    mask: Mask
    c: float


class TooDenseError(PatternError):
    """No distance between positions can be kept at this count."""


def disc_draw(
    quanta: Quanta,
    calibration: Mask,
    generator: np.random.Generator,
    law: Quanta | None = None,
) -> DiscDraw:
    """Exactly sum(p) positions that keep their distance.

    Parameters
    ----------
    quanta : ndarray of int64, shape (n_u, n_v)
        Inclusion probabilities in units of 2^-30.
    calibration : ndarray of bool
        Positions always taken and exempt from the rule.
    generator : numpy.random.Generator
        Source of raw 64-bit numbers.
    law : ndarray of int64, optional
        Probabilities that set the radii where they differ from ``quanta``: a frame of a
        complementary series draws from conditional probabilities but keeps the law's distances.

    Raises
    ------
    PatternError
        On a 1-D grid.
    TooDenseError
        When no distance above 1 can be kept anywhere.
    """
    if quanta.ndim != 2:
        raise PatternError(
            "A Poisson-disc draw needs a 2-D grid.",
            f"draw = 'poisson-disc' on a grid of {quanta.shape[0]} lines",
            "Use jittered, low-discrepancy or exact-count for 1-D patterns.",
        )
    problem = _Problem.of(quanta, calibration, generator, quanta if law is None else law)
    if problem.count == 0:
        return DiscDraw(calibration | problem.certain, 0.0)
    # certain positions may be neighbours: c up to 1 lets them
    low, high, best = 0.0, 1.0 if problem.certain.any() else _LARGEST_C, None
    for _ in range(_HALVINGS):
        c = (low + high) / 2
        mask = problem.attempt(c)
        if mask is None:
            high = c
        else:
            low, best = c, mask
    if best is None or not problem.binds(low):
        raise TooDenseError(
            f"{problem.count} random positions outside the calibration block lie so dense that no "
            "distance between them can be kept.",
            "acceleration of the draw 'poisson-disc'",
            "Ask for a larger acceleration, or use the draw 'exact-count'.",
        )
    return DiscDraw(best | calibration, low)


def disc_conflicts(mask: Mask, probability: Field, calibration: Mask, c: float) -> int:
    """Pairs of acquired positions outside the calibration block that break the pair rule."""
    from mrics.sampling._disc_kernels import conflicts

    taken = mask & ~calibration
    return int(conflicts(taken, _squares(probability, c)))


def _squares(probability: Field, c: float) -> Field:
    """r^2 of every position, 0 where nothing may be acquired."""
    square = np.zeros(probability.shape)
    np.divide(c * c, probability, out=square, where=probability > 0)
    return square


@dataclass(frozen=True)
class _Problem:
    probability: Field
    certain: Mask
    candidates: np.ndarray
    band: np.ndarray
    quota: np.ndarray
    count: int

    @classmethod
    def of(
        cls, quanta: Quanta, calibration: Mask, generator: np.random.Generator, law: Quanta
    ) -> _Problem:
        certain = (quanta == ONE) & ~calibration
        free = np.where(calibration | certain, 0, quanta)
        offered = np.flatnonzero(bernoulli(np.minimum(free * _OFFERS, ONE), generator))
        candidates = offered[shuffle(offered.size, generator)]
        count = int(free.sum() // ONE)
        band, quota = _bands(law.ravel(), free.ravel(), count, generator)
        return cls(np.where(calibration, 0, law) / ONE, certain, candidates, band, quota, count)

    def attempt(self, c: float) -> Mask | None:
        """A draw at this c, or None when a band or the total stays short."""
        from mrics.sampling._disc_kernels import throw

        square = _squares(self.probability, c)
        taken = self.certain.copy()
        quota = self.quota.copy()
        short = throw(self.candidates, square, self.band, quota, self.count, taken)
        if short == 0:
            return taken
        if (quota > np.ceil(SLACK * self.quota)).any():
            return None
        quota += np.ceil(SLACK * self.quota).astype(np.int64)
        short = throw(self.candidates, square, self.band, quota, short, taken)
        return taken if short == 0 else None

    def binds(self, c: float) -> bool:
        """True when the rule forbids anything at this c."""
        return bool((_squares(self.probability, c) > 1).any())


def _bands(
    law: np.ndarray, free: np.ndarray, count: int, generator: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    """Band of every position by level of the law, and the positions each band takes."""
    bands = max(1, min(_BANDS, count // _BAND_POSITIONS))
    values, level = np.unique(law, return_inverse=True)
    mass = np.bincount(level.ravel(), weights=free / ONE, minlength=values.size)
    middle = np.cumsum(mass) - mass / 2
    of_level = np.minimum((middle * bands / max(count, 1)).astype(np.int64), bands - 1)
    band = of_level[level.ravel()]
    ends = np.cumsum(np.bincount(of_level, weights=mass, minlength=bands))
    start = int(generator.bit_generator.random_raw()) * 2.0**-64
    return band, np.diff(np.floor(ends + start + 1e-9).astype(np.int64), prepend=0)
