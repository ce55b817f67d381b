"""The page of a plan: what every arm acquires, how long it takes, how its pattern looks."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

from mrics.report.arms import axis_name
from mrics.report.pattern_figures import pattern_figure, picture_of
from mrics.report.rendering import render, write_page
from mrics.report.spread_figures import spread_facts, spread_figure
from mrics.report.style_figures import svg_uri
from mrics.sampling.source import law_source

if TYPE_CHECKING:
    from mrics.study import PlanRow, Ranking, StudyPlan


def write_plan_page(plan: StudyPlan, path: str | Path, ranking: Ranking | None = None) -> Path:
    """Write the page of pattern pictures and times.

    Parameters
    ----------
    plan : StudyPlan
        As ``mrics.study.plan_study`` gives it.
    path : str or Path
        HTML file to write.
    ranking : Ranking, optional
        As ``mrics.study.rank_plan`` gives it.

    Raises
    ------
    ReportError
        Where the file cannot be written.
    """
    today = next((row for row in plan.rows if row.arm.today), None)
    rows: list[dict[str, Any]] = []
    drawn: dict[str, dict[str, Any]] = {}
    for row in plan.rows:
        key = row.pattern.hash
        if key not in drawn:
            drawn[key] = _picture(row, plan) | {"labels": [], "number": len(drawn) + 1}
        drawn[key]["labels"].append(row.arm.label)
        rows.append({"row": row, "number": drawn[key]["number"]})
    text = render(
        "plan.html",
        plan=plan,
        rows=rows,
        patterns=list(drawn.values()),
        today=today,
        findings=plan.findings(),
        ranking=ranking,
    )
    return write_page(Path(path), text)


def _picture(row: PlanRow, plan: StudyPlan) -> dict[str, Any]:
    """Pictures of one pattern; arms that differ in recovery alone share them."""
    grid = {"phase_axis": plan.axes.phase, "partition_axis": plan.axes.partition}
    energy = None
    if row.arm.sampling.get("training"):
        energy = law_source("energy", row.arm.sampling["training"], row.pattern.grid, plan.axes)
    names = axis_name("phase", grid), axis_name("partition", grid)
    picture = picture_of(row.pattern, *names, energy)
    return {
        "figure": svg_uri(pattern_figure(picture)),
        "text": picture.sentence,
        "detail": svg_uri(spread_figure(picture, row.played)),
        "facts": spread_facts(picture, row.played),
    }
