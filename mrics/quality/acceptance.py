"""What the acceptance limits say of one arm, and with what confidence."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from mrics.errors import QualityError
from mrics.quality.comparison import (
    FAIL,
    PASS,
    UNDECIDED,
    Comparison,
    against_limit,
    equivalence,
    non_inferiority,
)
from mrics.quality.confidence import Estimate, Summary
from mrics.quality.metrics import METRICS, AcceptanceKey, acceptance_key

PASS_HERE = "pass on this scan"


@dataclass(frozen=True)
class LimitResult:
    """One acceptance limit held against one arm.

    Attributes
    ----------
    key : str
        Acceptance key.
    limit : float
    value : float
        What was measured: mean, worst slice, or mean difference to the baseline.
    bound : float
        The end of the confidence interval that has to pass; ``value`` for the worst slice.
    status : str
        "pass", "pass on this scan", "fail" or "undecided" (also where no slice has a value, which
        is then NaN).
    margin : float
        How far ``value`` is on the good side of the limit; negative: by how much it fails.
    """

    key: str
    limit: float
    value: float
    bound: float
    status: str
    margin: float

    def as_dict(self) -> dict[str, Any]:
        """Plain values for results files."""
        return {
            "key": self.key,
            "limit": self.limit,
            "value": self.value,
            "bound": self.bound,
            "status": self.status,
            "margin": self.margin,
        }


@dataclass(frozen=True)
class Verdict:
    """All limits of one arm together.

    Attributes
    ----------
    status : str
        "fail" if any limit fails, else "undecided" if any is, else "pass"; with one or two scans
        "pass on this scan" in place of "pass".
    limits : tuple of LimitResult
    confidence : str
        One line: what the intervals are taken over and what may be claimed.
    """

    status: str
    limits: tuple[LimitResult, ...]
    confidence: str

    def as_dict(self) -> dict[str, Any]:
        """Plain values for results files."""
        return {
            "status": self.status,
            "limits": [limit.as_dict() for limit in self.limits],
            "confidence": self.confidence,
        }


def verdict(
    summaries: Mapping[str, Summary | None],
    limits: Mapping[str, float],
    comparisons: Mapping[str, Comparison] | None = None,
    *,
    level: float = 0.95,
) -> Verdict:
    """Hold one arm against the acceptance limits.

    A limit on the mean passes when the whole confidence interval of the scan mean is on its good
    side, fails when the whole interval is beyond it, and is undecided in between. A limit on the
    worst slice holds for the worst slice seen. A margin is a claim of non-inferiority to the
    baseline arm (one-sided 97.5 % bound of the paired difference), ``<metric>_equivalence`` one of
    equivalence (two one-sided tests at 5 %).

    Parameters
    ----------
    summaries : mapping of metric name to Summary
        From :func:`mrics.quality.summarise`; None where no slice has a value.
    limits : mapping of acceptance key to float
        Keys of :func:`mrics.quality.acceptance_keys`.
    comparisons : mapping of metric name to Comparison, or None
        Against the baseline; needed for margins only.
    level : float
        Two-sided level of the intervals.

    Raises
    ------
    QualityError
        For unknown keys, a limit on a metric that was not measured, a margin without a baseline,
        and a margin that is not positive.
    """
    results = tuple(
        _one(key, acceptance_key(key), float(limit), summaries, comparisons or {}, level)
        for key, limit in limits.items()
    )
    statuses = {result.status for result in results}
    for status in (FAIL, UNDECIDED, PASS_HERE, PASS):
        if status in statuses:
            return Verdict(status, results, _confidence(summaries, level))
    return Verdict(
        UNDECIDED, (), "No acceptance limits were given. " + _confidence(summaries, level)
    )


def _one(
    key: str,
    meaning: AcceptanceKey,
    limit: float,
    summaries: Mapping[str, Summary | None],
    comparisons: Mapping[str, Comparison],
    level: float,
) -> LimitResult:
    name = meaning.metric
    if name not in summaries:
        raise QualityError(
            f"{METRICS[name].label} has a limit but was not measured.",
            f"[acceptance] {key}",
            "Measure it, or take the limit out.",
        )
    summary = summaries[name]
    if summary is None:
        # Looked for and nowhere found (no clean edge, say): neither a pass nor a failure.
        return LimitResult(key, limit, math.nan, math.nan, UNDECIDED, math.nan)
    if meaning.kind == "worst":
        value = summary.worst
        good = value >= limit if meaning.side == "min" else value <= limit
        status = _scoped(PASS if good else FAIL, summary.estimate)
        return LimitResult(key, limit, value, value, status, _room(value, limit, meaning.side))
    if meaning.kind == "mean":
        best = summary.estimate
        claim = against_limit(best, limit, meaning.side, level)
        room = _room(best.mean, limit, meaning.side)
        return LimitResult(key, limit, best.mean, claim.bound, _scoped(claim.status, best), room)
    if name not in comparisons:
        raise QualityError(
            f"{key} compares with a baseline, but this arm was compared with none.",
            f"[acceptance] {key}",
            "Compare it with today's arm or the full scan, or take the margin out.",
        )
    comparison = comparisons[name]
    best = comparison.estimate
    if meaning.kind == "margin":
        claim = non_inferiority(comparison, limit, METRICS[name].direction, level)
        lost = best.mean if METRICS[name].direction == "lower" else -best.mean
    else:
        claim = equivalence(comparison, limit)
        lost = abs(best.mean)
    status = _scoped(claim.status, best)
    return LimitResult(key, limit, best.mean, claim.bound, status, limit - lost)


def _scoped(status: str, best: Estimate) -> str:
    return PASS_HERE if status == PASS and not best.claims else status


def _room(value: float, limit: float, side: str) -> float:
    return value - limit if side == "min" else limit - value


def _confidence(summaries: Mapping[str, Summary | None], level: float) -> str:
    estimates = [one.estimate for one in summaries.values() if one is not None]
    if not estimates:
        return "Nothing was measured."
    best = max(estimates, key=lambda one: (one.scans, one.draws))
    if best.claims:
        return f"{100 * level:g} % intervals of the mean over {best.over} ({best.method})."
    which = "this scan" if best.scans == 1 else "these 2 scans"
    if best.draws < 2:
        return f"One draw of {which}: no interval, and no claim beyond {which}."
    single = any(one.draws < 2 for one in estimates)
    rest = " Measures of one draw have no interval." if single else ""
    return f"{100 * level:g} % intervals over {best.over}; no claim beyond {which}.{rest}"
