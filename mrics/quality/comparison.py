"""Paired comparison of arms: difference, Holm's correction, non-inferiority, equivalence.

Two arms are compared on the same scans, slices, draws and noise. The difference is taken slice by
slice, averaged within a draw, then within a scan; its interval follows the rules of
:mod:`mrics.quality.confidence`. An arm that has one draw of a scan (a regular pattern) is held
against every draw of the other.

References
----------
Holm 1979, Scand J Statist 6:65-70. Schuirmann 1987, J Pharmacokinet Biopharm 15:657-680 (two
one-sided tests).
"""

from __future__ import annotations

from collections.abc import Hashable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from mrics.errors import QualityError
from mrics.quality.confidence import Estimate, Interval, Record, estimate

PASS = "pass"
FAIL = "fail"
UNDECIDED = "undecided"


@dataclass(frozen=True)
class Comparison:
    """Arm less baseline, one metric.

    Attributes
    ----------
    estimate : Estimate
        Mean paired difference with its error.
    interval : Interval or None
        Two-sided, for this comparison alone.
    simultaneous : Interval or None
        Bonferroni interval: holds for all arms compared together.
    p : float
        Two-sided p value of no difference, for this comparison alone; NaN where none can be given.
    p_holm : float
        The same, corrected by Holm over the arms compared together.
    arms : int
        How many arms were compared together.
    """

    estimate: Estimate
    interval: Interval | None
    simultaneous: Interval | None
    p: float
    p_holm: float
    arms: int = 1

    def as_dict(self) -> dict[str, Any]:
        """Plain values for results files."""
        return {
            "difference": self.estimate.mean,
            "interval": self.interval.as_dict() if self.interval else None,
            "simultaneous": self.simultaneous.as_dict() if self.simultaneous else None,
            "p": None if np.isnan(self.p) else self.p,
            "p_holm": None if np.isnan(self.p_holm) else self.p_holm,
            "arms": self.arms,
        }


@dataclass(frozen=True)
class Claim:
    """What an interval says of a limit.

    Attributes
    ----------
    status : str
        "pass", "fail" or "undecided".
    bound : float
        The end of the interval that has to pass.
    p : float
        One-sided p value of the claim (the larger of two for equivalence).
    """

    status: str
    bound: float
    p: float


def holm(p_values: Sequence[float]) -> list[float]:
    """P values corrected by Holm's step-down method, in the order given; NaN stays NaN.

    The smallest of m is multiplied by m, the next by m - 1, and so on; none may fall below an
    earlier one or exceed 1.
    """
    corrected = np.array(p_values, dtype=np.float64)
    given = np.flatnonzero(~np.isnan(corrected))
    order = given[np.argsort(corrected[given], kind="stable")]
    factors = np.arange(order.size, 0, -1)
    stepped = np.maximum.accumulate(corrected[order] * factors)
    corrected[order] = np.minimum(stepped, 1.0)
    return [float(value) for value in corrected]


def compare(
    arm: Iterable[Record],
    baseline: Iterable[Record],
    *,
    level: float = 0.95,
    seed: int = 0,
) -> Comparison:
    """Paired difference of two arms, arm less baseline.

    Parameters
    ----------
    arm, baseline : iterable of (scan, draw, slice, value)
        As for :func:`mrics.quality.summarise`; slices without a value in either are left out.
    level : float
        Two-sided level.
    seed : int
        Of the bootstrap.

    Raises
    ------
    QualityError
        Where the two have no scan in common, or draws that do not pair.
    """
    best = estimate(_paired(list(arm), list(baseline)), seed=seed)
    interval = best.interval(level)
    p = best.p_differs()
    return Comparison(best, interval, interval, p, p)


def compare_arms(
    arms: Mapping[str, Iterable[Record]],
    baseline: Iterable[Record],
    *,
    level: float = 0.95,
    seed: int = 0,
) -> dict[str, Comparison]:
    """Several arms against one baseline, p values corrected by Holm over the arms."""
    common = list(baseline)
    single = {
        name: compare(records, common, level=level, seed=seed) for name, records in arms.items()
    }
    corrected = holm([one.p for one in single.values()])
    wide = 1.0 - (1.0 - level) / max(1, len(single))
    return {
        name: replace(one, p_holm=p, simultaneous=one.estimate.interval(wide), arms=len(single))
        for (name, one), p in zip(single.items(), corrected, strict=True)
    }


def against_limit(best: Estimate, limit: float, side: str, level: float = 0.95) -> Claim:
    """Whether a mean passes a limit, with its confidence interval.

    Parameters
    ----------
    best : Estimate
    limit : float
    side : str
        "min" where the mean must not fall below the limit, "max" where it must not exceed it.
    level : float
        Two-sided level; the bound is one-sided at ``(1 + level) / 2`` (97.5 %).

    Returns
    -------
    Claim
        Pass where the whole interval is on the good side (the limit included), fail where the whole
        interval is beyond, else undecided. Without an interval the mean alone decides.
    """
    interval = best.interval(level)
    low, high = (interval.low, interval.high) if interval else (best.mean, best.mean)
    if side == "min":
        status = PASS if low >= limit else FAIL if high < limit else UNDECIDED
        return Claim(status, low, best.p_above(limit))
    status = PASS if high <= limit else FAIL if low > limit else UNDECIDED
    return Claim(status, high, best.p_below(limit))


def non_inferiority(
    comparison: Comparison, margin: float | None, direction: str, level: float = 0.95
) -> Claim:
    """Whether an arm is no worse than its baseline by more than a margin.

    Parameters
    ----------
    comparison : Comparison
    margin : float
        Largest loss that is acceptable, positive, in the metric's unit.
    direction : str
        "lower" or "higher": which is better.
    level : float
        Two-sided level; 0.95 gives the one-sided 97.5 % bound.

    Raises
    ------
    QualityError
        For a margin that is missing or not positive.
    """
    allowed = _margin(margin)
    if direction == "higher":
        return against_limit(comparison.estimate, -allowed, "min", level)
    return against_limit(comparison.estimate, allowed, "max", level)


def equivalence(comparison: Comparison, margin: float | None, alpha: float = 0.05) -> Claim:
    """Two one-sided tests: whether the difference lies within the margin in both directions.

    Pass where the ``1 - 2 alpha`` interval lies inside (-margin, margin), fail where it lies
    wholly outside, else undecided. ``bound`` is the end of the interval that is farther out.

    Raises
    ------
    QualityError
        For a margin that is missing or not positive.
    """
    allowed = _margin(margin)
    best = comparison.estimate
    interval = best.interval(1.0 - 2.0 * alpha)
    low, high = (interval.low, interval.high) if interval else (best.mean, best.mean)
    p = float(np.maximum(best.p_above(-allowed), best.p_below(allowed)))
    outer = high if abs(high) >= abs(low) else low
    if -allowed < low and high < allowed:
        return Claim(PASS, outer, p)
    if low >= allowed or high <= -allowed:
        return Claim(FAIL, outer, p)
    return Claim(UNDECIDED, outer, p)


def _margin(margin: float | None) -> float:
    if margin is None or not margin > 0.0:
        raise QualityError(
            f"The margin is {margin}; a claim of no difference needs a positive one.",
            "[acceptance] <metric>_margin",
            "Give the largest loss that is acceptable, in the metric's unit.",
        )
    return float(margin)


def _paired(arm: list[Record], baseline: list[Record]) -> dict[Hashable, dict[Hashable, float]]:
    ours, theirs = _by_scan(arm), _by_scan(baseline)
    table: dict[Hashable, dict[Hashable, float]] = {}
    for scan, draws in ours.items():
        if scan not in theirs:
            continue
        pairs = _draw_pairs(scan, draws, theirs[scan])
        differences = {}
        for draw, (one, other) in pairs.items():
            shared = [where for where in one if where in other]
            if shared:
                differences[draw] = float(np.mean([one[w] - other[w] for w in shared]))
        if differences:
            table[scan] = differences
    if not table:
        raise QualityError(
            "The two arms have no slice of a scan in common.",
            "comparison of arms",
            "Compare arms that were run on the same scans and slices.",
        )
    return table


Slices = dict[Any, float]


def _by_scan(records: list[Record]) -> dict[Hashable, dict[Hashable, Slices]]:
    table: dict[Hashable, dict[Hashable, Slices]] = {}
    for scan, draw, where, value in records:
        if value is not None:
            key = tuple(sorted(where.items())) if isinstance(where, dict) else where
            table.setdefault(scan, {}).setdefault(draw, {})[key] = float(value)
    return table


def _draw_pairs(
    scan: Hashable, ours: dict[Hashable, Slices], theirs: dict[Hashable, Slices]
) -> dict[Hashable, tuple[Slices, Slices]]:
    if len(theirs) == 1:
        only = next(iter(theirs.values()))
        return {draw: (slices, only) for draw, slices in ours.items()}
    if len(ours) == 1:
        only = next(iter(ours.values()))
        return {draw: (only, slices) for draw, slices in theirs.items()}
    if set(ours) != set(theirs):
        raise QualityError(
            f"The two arms have different draws of one scan: {sorted(map(str, ours))} and "
            f"{sorted(map(str, theirs))}.",
            f"scan {scan}",
            "Run both arms with the same draws, or one of them with a single draw.",
        )
    return {draw: (slices, theirs[draw]) for draw, slices in ours.items()}
