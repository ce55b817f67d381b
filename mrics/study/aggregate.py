"""Arm numbers from units: mean, range, interval, worst slice, and what the limits say."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from mrics.protocol import Limit
from mrics.quality import METRICS, Comparison, Summary, compare_arms, summarise, verdict
from mrics.quality.acceptance import LimitResult
from mrics.quality.comparison import UNDECIDED
from mrics.quality.confidence import draw_means
from mrics.study.advice import what_would_decide

Records = list[tuple[str, int, tuple[int, int], float | None]]


@dataclass(frozen=True)
class ArmNumbers:
    """Everything the units of one arm say together.

    Attributes
    ----------
    metrics : dict
        Metric name to mean, min, max, interval, worst and where, as results files hold it.
    comparisons : dict
        Metric name to the paired difference to today's arm; empty without one.
    differences : dict
        The same to the baseline of margins.
    verdict : dict
        What the acceptance limits say.
    """

    metrics: dict[str, dict[str, Any]]
    comparisons: dict[str, dict[str, Any]]
    differences: dict[str, dict[str, Any]]
    verdict: dict[str, Any]


def arm_numbers(
    units: dict[str, list[dict[str, Any]]],
    limits: Sequence[Limit],
    today: str | None,
    seed: int,
    level: float = 0.95,
    baseline: str | None = None,
) -> dict[str, ArmNumbers]:
    """Numbers of every arm.

    Parameters
    ----------
    units : dict of arm id to list of unit results
        Finished units.
    limits : sequence of Limit
        The protocol's acceptance limits.
    today : str or None
        Id of the arm in use today, to which differences are taken.
    seed : int
        Of the bootstrap.
    level : float
        Of the intervals, two-sided.
    baseline : str, optional
        Id of the arm that margins refer to; today's where left out.
    """
    scored = [
        name for name in METRICS if any(_has(unit, name) for u in units.values() for unit in u)
    ]
    summaries: dict[str, dict[str, Summary | None]] = {
        arm: {
            name: summarise(
                _records(mine, name), direction=METRICS[name].direction, level=level, seed=seed
            )
            for name in scored
        }
        for arm, mine in units.items()
    }
    baseline = today if baseline is None else baseline
    comparisons = {
        one: _against(units, one, scored, seed, level) for one in {today, baseline} if one
    }
    none: dict[str, dict[str, Comparison]] = {arm: {} for arm in units}
    differences = comparisons.get(baseline or "", none)
    with_today = comparisons.get(today or "", none)
    by_key = {limit.key: limit for limit in limits}
    numbers = {}
    for arm in units:
        # The baseline has no difference to itself to hold a margin against.
        held = {
            limit.key: limit.value
            for limit in limits
            if arm != baseline or limit.kind in ("mean", "worst")
        }
        judged = verdict(summaries[arm], held, differences[arm], level=level)
        numbers[arm] = ArmNumbers(
            metrics={name: _placed(summary) for name, summary in summaries[arm].items() if summary},
            comparisons={name: c.as_dict() for name, c in with_today[arm].items()},
            differences={name: c.as_dict() for name, c in differences[arm].items()},
            verdict={
                **judged.as_dict(),
                "limits": [
                    {
                        **one.as_dict(),
                        "metric": by_key[one.key].metric,
                        "advice": _advice(units[arm], by_key[one.key], one, level)
                        if judged.status == UNDECIDED
                        else None,
                    }
                    for one in judged.limits
                ],
            },
        )
    return numbers


def _against(
    units: dict[str, list[dict[str, Any]]],
    baseline: str,
    metrics: Sequence[str],
    seed: int,
    level: float,
) -> dict[str, dict[str, Comparison]]:
    """Paired differences to one arm: arm -> metric -> comparison."""
    found: dict[str, dict[str, Comparison]] = {arm: {} for arm in units}
    for name in metrics:
        arms = {arm: _records(mine, name) for arm, mine in units.items() if arm != baseline}
        arms = {arm: rows for arm, rows in arms.items() if any(r[3] is not None for r in rows)}
        theirs = _records(units[baseline], name)
        if arms and any(r[3] is not None for r in theirs):
            for arm, one in compare_arms(arms, theirs, level=level, seed=seed).items():
                found[arm][name] = one
    return found


def _records(units: Sequence[dict[str, Any]], name: str) -> Records:
    return [
        (unit["scan"], unit["draw"], (part["index"], part["frame"]), part[name])
        for unit in units
        for part in unit["slices"]
        # A plane that a measure was not taken of counts as no skipped slice.
        if name in part
    ]


def _has(unit: dict[str, Any], name: str) -> bool:
    return any(name in part for part in unit["slices"])


def _placed(summary: Summary) -> dict[str, Any]:
    """A summary with the place of its worst slice as plain numbers."""
    values = summary.as_dict()
    index, frame = values["worst_where"]["slice"]
    values["worst_where"] = {**values["worst_where"], "slice": index, "frame": frame}
    return values


def _advice(
    units: Sequence[dict[str, Any]], limit: Limit, result: LimitResult, level: float
) -> str | None:
    """What would decide an undecided limit on the mean."""
    if result.status != UNDECIDED or limit.kind != "mean":
        return None
    table = draw_means(_records(units, limit.metric))
    return what_would_decide(table, result.limit, level)
