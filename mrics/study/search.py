"""The fastest acceleration of a family that still passes, without running every one."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass
from itertools import pairwise
from typing import Any

from mrics.protocol import Limit
from mrics.quality import METRICS
from mrics.study.aggregate import arm_numbers
from mrics.study.plan import PlanRow

Results = list[dict[str, Any]]
# Runs the first draws of one arm on every scan and gives the results of its units.
Runner = Callable[[PlanRow, int], Results]
LEVEL = 0.95


@dataclass(frozen=True)
class Decision:
    """One look at one acceleration.

    Attributes
    ----------
    acceleration : float
        Acceleration looked at.
    arm : str
        Its arm.
    draws : int
        Draws it was judged on.
    level : float
        Level of the interval; the two looks share the error of one.
    status : str
        What the limits said.
    """

    acceleration: float
    arm: str
    draws: int
    level: float
    status: str


@dataclass(frozen=True)
class Found:
    """How a search went.

    Attributes
    ----------
    family : str
        Sampling and recovery.
    arm : str or None
        The fastest arm that passes; None where none does.
    acceleration : float or None
        Its acceleration.
    candidates : int
        Accelerations there were to choose from.
    decisions : tuple of Decision
        In the order they were made.
    findings : tuple of str
        What does not fit a quality that falls with acceleration.
    """

    family: str
    arm: str | None
    acceleration: float | None
    candidates: int
    decisions: tuple[Decision, ...]
    findings: tuple[str, ...]

    def as_dict(self) -> dict[str, Any]:
        """Plain values for results files."""
        return asdict(self)


def search_family(
    rows: Sequence[PlanRow],
    run: Runner,
    limits: Sequence[Limit],
    baseline: tuple[str, Results] | None,
    seed: int,
) -> Found:
    """Find the fastest arm that passes by halving the range, in at most two looks at each arm.

    Passing is taken to end at one acceleration: an arm that passes sends the search to faster
    ones, any other to slower ones. An arm is judged on half its draws first and on all of them
    only where that leaves it undecided; each look has half of the error (level 97.5 %).

    Parameters
    ----------
    rows : sequence of PlanRow
        The family's arms, slowest first.
    run : callable
        Runs draws of one arm.
    limits : sequence of Limit
        Acceptance limits, at least one.
    baseline : (arm id, its results) or None
        What margins are taken against.
    seed : int
        Of the bootstrap.
    """
    level = 1.0 - (1.0 - LEVEL) / 2.0
    decisions: list[Decision] = []
    seen: dict[int, dict[str, Any]] = {}
    low, high = -1, len(rows)
    while high - low > 1:
        middle = (low + high) // 2
        row = rows[middle]
        status = ""
        for half in (True, False):
            results = run(row, (row.draws + 1) // 2 if half else row.draws)
            draws = len({unit["draw"] for unit in results})
            units = {row.arm.id: results}
            if baseline is not None:
                units[baseline[0]] = baseline[1]
            numbers = arm_numbers(
                units, limits, None if baseline is None else baseline[0], seed, level=level
            )[row.arm.id]
            status = numbers.verdict["status"]
            seen[middle] = numbers.metrics
            decisions.append(
                Decision(float(row.arm.acceleration or 0), row.arm.id, draws, level, status)
            )
            if status != "undecided" or draws == row.draws:
                break
        low, high = (middle, high) if status.startswith("pass") else (low, middle)
    best = rows[low].arm if low >= 0 else None
    return Found(
        family=rows[0].arm.search,
        arm=None if best is None else best.id,
        acceleration=None if best is None else best.acceleration,
        candidates=len(rows),
        decisions=tuple(decisions),
        findings=_against_order(rows, seen, limits),
    )


def _against_order(
    rows: Sequence[PlanRow], seen: dict[int, dict[str, Any]], limits: Sequence[Limit]
) -> tuple[str, ...]:
    """Limited metrics whose mean is better at a faster acceleration than at a slower one."""
    found = []
    order = sorted(seen)
    for metric in dict.fromkeys(limit.metric for limit in limits):
        sign = 1.0 if METRICS[metric].direction == "higher" else -1.0
        for slow, fast in pairwise(order):
            if metric not in seen[slow] or metric not in seen[fast]:
                continue
            if sign * (seen[fast][metric]["mean"] - seen[slow][metric]["mean"]) > 0:
                found.append(
                    f"{metric} is better at R = {rows[fast].arm.acceleration:g} than at R = "
                    f"{rows[slow].arm.acceleration:g}: quality does not fall steadily here."
                )
    return tuple(found)
