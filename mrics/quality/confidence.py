"""From slices to one number with an interval: the scan is the unit.

Slices are averaged within a draw, draws within a scan, and scans give the mean. The interval of
that mean comes from how scans differ:

* 3 to 19 scans: Student t on the scan means.
* 20 scans and more: hierarchical bootstrap-t (scans are resampled, then draws within each). The
  resampled statistic is studentised by the spread of its own scan means, so that the second stage,
  which adds draw variance once more, does so above and below the line alike.
* 1 or 2 scans: over the draws of these scans alone (Welch-Satterthwaite degrees of freedom for
  two). It says how much the luck of the draw matters for this scan, and nothing of other scans.

Draws must be independent between scans: were draw k one pattern for all scans, their means would
move together and their spread would not show it.

References
----------
Davison and Hinkley 1997, Bootstrap Methods and their Application, sections 3.8 (hierarchical data)
and 5.2 (studentised intervals); cited from memory.
"""

from __future__ import annotations

import math
from collections.abc import Hashable, Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import QualityError
from mrics.numerics import stream

BOOTSTRAP_FROM = 20
CLAIM_FROM = 3
RESAMPLES = 3999
THIS_SCAN = "this scan, luck of the draw"
_BLOCK = 2_000_000

Record = tuple[Hashable, Hashable, Any, float | None]
Draws = Mapping[Hashable, Mapping[Hashable, float]]


@dataclass(frozen=True)
class Interval:
    """A confidence interval and what it is taken over.

    Attributes
    ----------
    low, high : float
    level : float
        Nominal coverage, two-sided.
    method : str
        "Student t", "hierarchical bootstrap-t" or "Student t over draws".
    over : str
        "5 scans", or "this scan, luck of the draw (5 draws)".
    """

    low: float
    high: float
    level: float
    method: str
    over: str

    def as_dict(self) -> dict[str, Any]:
        """Plain values for results files."""
        return {
            "low": self.low,
            "high": self.high,
            "level": self.level,
            "method": self.method,
            "over": self.over,
        }


@dataclass(frozen=True)
class Estimate:
    """A mean with the distribution of its studentised error.

    Attributes
    ----------
    mean : float
        Mean of the scan means.
    error : float
        Its standard error; NaN where one value gives none.
    freedom : float
        Degrees of freedom of Student's t, unused where ``resampled`` is given.
    scans, draws : int
        How many scans, and how many draws the scan with most of them has.
    resampled : ndarray or None
        Sorted studentised bootstrap errors.
    """

    mean: float
    error: float
    freedom: float
    scans: int
    draws: int
    resampled: NDArray[np.float64] | None = field(default=None, repr=False)

    @property
    def known(self) -> bool:
        """True where an interval can be given."""
        return math.isfinite(self.mean) and math.isfinite(self.error)

    @property
    def claims(self) -> bool:
        """True where there are scans enough to speak of other scans than these."""
        return self.scans >= CLAIM_FROM

    @property
    def method(self) -> str:
        """How the interval is made."""
        if self.resampled is not None:
            return "hierarchical bootstrap-t"
        return "Student t" if self.claims else "Student t over draws"

    @property
    def over(self) -> str:
        """What the interval is taken over."""
        if self.claims:
            return f"{self.scans} scans"
        which = THIS_SCAN if self.scans == 1 else THIS_SCAN.replace("this scan", "these 2 scans")
        return f"{which} ({self.draws} draws)"

    def interval(self, level: float = 0.95) -> Interval | None:
        """Two-sided interval; its ends are one-sided bounds at ``(1 + level) / 2``."""
        if not self.known:
            return None
        tail = (1.0 - level) / 2.0
        return Interval(
            self.mean - self._quantile(1.0 - tail) * self.error,
            self.mean - self._quantile(tail) * self.error,
            level,
            self.method,
            self.over,
        )

    def p_above(self, null: float) -> float:
        """One-sided p value of the claim that the true mean lies above ``null``."""
        return self._tail(null, upper=True)

    def p_below(self, null: float) -> float:
        """One-sided p value of the claim that the true mean lies below ``null``."""
        return self._tail(null, upper=False)

    def p_differs(self, null: float = 0.0) -> float:
        """Two-sided p value of the claim that the true mean is not ``null``."""
        return min(1.0, 2.0 * min(self.p_above(null), self.p_below(null)))

    def _quantile(self, probability: float) -> float:
        if self.error == 0.0:
            return 0.0
        if self.resampled is not None:
            return float(np.quantile(self.resampled, probability))
        from scipy.stats import t

        return float(t.ppf(probability, self.freedom))

    def _tail(self, null: float, upper: bool) -> float:
        if not self.known:
            return math.nan
        gap = (self.mean - null) if upper else (null - self.mean)
        if self.error == 0.0:
            return 0.0 if gap > 0.0 else 1.0
        statistic = gap / self.error
        if self.resampled is not None:
            errors = self.resampled if upper else -self.resampled
            return float((1 + np.count_nonzero(errors >= statistic)) / (1 + errors.size))
        from scipy.stats import t

        return float(t.sf(statistic, self.freedom))


@dataclass(frozen=True)
class Summary:
    """One metric of one arm: mean, range, interval, worst slice.

    Attributes
    ----------
    mean : float
        Mean of the scan means.
    min, max : float
        Over all slices, draws and scans.
    worst : float
        ``max`` where lower is better, else ``min``.
    worst_where : dict
        Scan, draw and slice of ``worst``.
    estimate : Estimate
        Mean with its error, from which intervals at other levels are made.
    interval : Interval or None
        At the level asked for; None where there is one value, or infinite ones.
    scan_means : dict
        Mean of each scan.
    skipped : int
        Slices without a value (no voxel in the mask, or a zero reference).
    """

    mean: float
    min: float
    max: float
    worst: float
    worst_where: dict[str, Any]
    estimate: Estimate
    interval: Interval | None
    scan_means: dict[Hashable, float]
    skipped: int

    def as_dict(self) -> dict[str, Any]:
        """Plain values for results files."""
        return {
            "mean": self.mean,
            "min": self.min,
            "max": self.max,
            "interval": self.interval.as_dict() if self.interval else None,
            "worst": self.worst,
            "worst_where": dict(self.worst_where),
            "skipped": self.skipped,
        }


def summarise(
    records: Iterable[Record],
    *,
    direction: str,
    level: float = 0.95,
    seed: int = 0,
) -> Summary | None:
    """Mean, range, interval and worst slice of one metric of one arm.

    Parameters
    ----------
    records : iterable of (scan, draw, slice, value)
        One value per slice; None where a slice has none (skipped and counted). ``slice`` is handed
        back in ``worst_where`` and may be None for measures of whole scans.
    direction : str
        "lower" or "higher": which is better.
    level : float
        Two-sided level of the interval.
    seed : int
        Of the bootstrap.

    Returns
    -------
    Summary or None
        None where no slice has a value.

    Raises
    ------
    QualityError
        For a value that is not a number, and an unknown direction.
    """
    if direction not in ("lower", "higher"):
        raise QualityError(
            f"Direction {direction!r} is neither 'lower' nor 'higher'.",
            "direction",
            "Say which is better.",
        )
    rows = list(records)
    kept = [row for row in rows if row[3] is not None]
    if not kept:
        return None
    values = [float(row[3]) for row in kept if row[3] is not None]
    low, high = min(values), max(values)
    worst = high if direction == "lower" else low
    scan, draw, where, _ = kept[values.index(worst)]
    table = draw_means(kept)
    best = estimate(table, seed=seed)
    return Summary(
        mean=best.mean,
        min=low,
        max=high,
        worst=worst,
        worst_where={"scan": scan, "draw": draw, "slice": where},
        estimate=best,
        interval=best.interval(level),
        scan_means={name: _mean(draws.values()) for name, draws in table.items()},
        skipped=len(rows) - len(kept),
    )


def draw_means(records: Iterable[Record]) -> dict[Hashable, dict[Hashable, float]]:
    """Slices averaged: scan -> draw -> mean, in the order of first appearance."""
    slices: dict[Hashable, dict[Hashable, list[float]]] = {}
    for scan, draw, where, value in records:
        if value is None:
            continue
        if math.isnan(value):
            raise QualityError(
                "A value to be averaged is not a number.",
                f"scan {scan}, draw {draw}, slice {where}",
                "Give None for a slice that has no value.",
            )
        slices.setdefault(scan, {}).setdefault(draw, []).append(float(value))
    return {
        scan: {draw: _mean(values) for draw, values in draws.items()}
        for scan, draws in slices.items()
    }


def estimate(table: Draws, *, seed: int = 0) -> Estimate:
    """Mean of the scan means with its standard error (rules in the module's docstring).

    Parameters
    ----------
    table : mapping of scan to mapping of draw to float
        At least one scan with one draw each.
    seed : int
        Of the bootstrap, used from 20 scans on.
    """
    draws = [np.array(list(one.values()), dtype=np.float64) for one in table.values()]
    means = np.array([_mean(one) for one in draws])
    count, most = len(draws), max(one.size for one in draws)
    mean = _mean(means)
    if not np.isfinite(means).all():
        return Estimate(mean, math.nan, math.nan, count, most)
    if count < CLAIM_FROM:
        return _over_draws(draws, mean, most)
    error = float(means.std(ddof=1) / math.sqrt(count))
    resampled = _bootstrap(draws, mean, seed) if count >= BOOTSTRAP_FROM and error > 0 else None
    return Estimate(mean, error, count - 1.0, count, most, resampled)


def _over_draws(draws: list[NDArray[np.float64]], mean: float, most: int) -> Estimate:
    if min(one.size for one in draws) < 2:
        return Estimate(mean, math.nan, math.nan, len(draws), most)
    parts = np.array([one.var(ddof=1) / one.size for one in draws]) / len(draws) ** 2
    total = float(parts.sum())
    freedom = np.array([one.size - 1.0 for one in draws])
    satterthwaite = total**2 / float((parts**2 / freedom).sum()) if total > 0.0 else math.inf
    return Estimate(mean, math.sqrt(total), satterthwaite, len(draws), most)


def _bootstrap(
    draws: list[NDArray[np.float64]], mean: float, seed: int
) -> NDArray[np.float64] | None:
    count, most = len(draws), max(one.size for one in draws)
    sizes = np.array([one.size for one in draws])
    padded = np.zeros((count, most))
    for row, one in zip(padded, draws, strict=True):
        row[: one.size] = one
    generator = stream(seed, "hierarchical bootstrap-t")
    errors = []
    block = max(1, _BLOCK // (count * most))
    for start in range(0, RESAMPLES, block):
        rounds = min(block, RESAMPLES - start)
        scans = generator.integers(count, size=(rounds, count))
        size = sizes[scans][..., None]
        picks = (generator.random((rounds, count, most)) * size).astype(np.intp)
        used = np.arange(most) < size
        values = padded[scans[..., None], picks]
        means = np.where(used, values, 0.0).sum(axis=2) / size[..., 0]
        spread = means.std(axis=1, ddof=1) / math.sqrt(count)
        real = spread > 0.0
        errors.append((means.mean(axis=1)[real] - mean) / spread[real])
    joined = np.sort(np.concatenate(errors))
    # Too few distinct values to resample (nearly all scans equal): Student t stands.
    return joined if joined.size >= RESAMPLES // 2 else None


def _mean(values: Iterable[float]) -> float:
    listed = list(values)
    return (
        float(math.fsum(listed) / len(listed))
        if all(map(math.isfinite, listed))
        else (float(np.mean(listed)))
    )
