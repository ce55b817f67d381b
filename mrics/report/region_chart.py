"""Labelled regions: means against the reference with limits of agreement."""

from __future__ import annotations

import textwrap
from typing import Any

import numpy as np

from mrics.quality.regions import bland_altman
from mrics.report.colours import GRID, INK, SERIES
from mrics.report.folder import StudyFolder
from mrics.report.panels import Panel
from mrics.report.words import number

Regions = dict[int, list[dict[str, Any]]]


def panel(study: StudyFolder) -> Panel | None:
    """The chart, None where no study had a label map."""
    found = regions(study)
    if not found:
        return None
    labels = {arm["id"]: str(arm["label"]) for arm in study.arms}
    return Panel(
        name="regions",
        title="Labelled regions",
        text="Mean of every labelled region in every slice: recovered less reference, against the "
        "mean of both, one panel for each arm and one mark for each label. Solid: bias; dashed: "
        "limits of agreement, bias less and plus 1.96 standard deviations (Bland and Altman).",
        size_in=(7.2, 0.7 + 2.0 * -(-len(found) // 3)),
        draw=lambda figure: _draw(figure, labels, found),
        head=(
            "Arm",
            "Region",
            "Mean",
            "Reference mean",
            "SD",
            "Reference SD",
            "Contrast",
            "Reference contrast",
            "CNR",
            "Reference CNR",
            "Bias",
            "Limits of agreement",
        ),
        rows=[
            _row(labels[arm], label, rows)
            for arm, mine in found.items()
            for label, rows in sorted(mine.items())
        ],
    )


def regions(study: StudyFolder) -> dict[str, Regions]:
    """Region rows of every arm's units, by label."""
    out: dict[str, Regions] = {}
    for arm in study.arms:
        for table in study.measures(arm["id"]):
            for row in table.get("regions") or []:
                if row.get("plane_means") and row.get("reference_plane_means"):
                    out.setdefault(arm["id"], {}).setdefault(int(row["label"]), []).append(row)
    return out


def _pairs(rows: list[dict[str, Any]]) -> tuple[Any, Any]:
    """Means of a region, recovered and reference, of every slice, draw and scan."""
    return (
        np.concatenate([row["plane_means"] for row in rows]),
        np.concatenate([row["reference_plane_means"] for row in rows]),
    )


def _row(arm: str, label: int, rows: list[dict[str, Any]]) -> tuple[str, ...]:
    def mean(key: str) -> str:
        values = [row[key] for row in rows if row[key] is not None]
        return number(float(np.mean(values)) if values else None)

    agreement = bland_altman(*_pairs(rows))
    kinds = ("mean", "sd", "contrast", "cnr")
    keys = [key for kind in kinds for key in (kind, f"reference_{kind}")]
    limits = f"{number(agreement.low)} to {number(agreement.high)}"
    return (arm, str(label), *(mean(key) for key in keys), number(agreement.bias), limits)


def _draw(figure: Any, labels: dict[str, str], found: dict[str, Regions]) -> None:
    columns = min(3, len(found))
    grid = figure.subplots(
        -(-len(found) // columns), columns, squeeze=False, sharex=True, sharey=True
    )
    marks = "os^Dv<>p*"
    for axes, (arm, mine) in zip(grid.flat, found.items(), strict=False):
        pairs = [_pairs(rows) for rows in mine.values()]
        for place, (label, (ours, theirs)) in enumerate(zip(mine, pairs, strict=True)):
            look = {"marker": marks[place % len(marks)], "color": SERIES[place % len(SERIES)]}
            axes.scatter(0.5 * (ours + theirs), ours - theirs, s=9, label=f"label {label}", **look)
        agreement = bland_altman(*(np.concatenate(side) for side in zip(*pairs, strict=True)))
        axes.axhline(0.0, color=GRID, lw=0.8)
        axes.axhline(agreement.bias, color=INK, lw=1.0)
        for level in (agreement.low, agreement.high):
            if np.isfinite(level):
                axes.axhline(level, color=INK, lw=0.9, ls="--")
        axes.set_title(textwrap.fill(labels[arm], 34), fontsize=8)
    for axes in list(grid.flat)[len(found) :]:
        axes.set_axis_off()
    for axes in grid[:, 0]:
        axes.set_ylabel("recovered − reference", fontsize=8)
    for axes in grid.flat[max(0, len(found) - columns) : len(found)]:
        axes.set_xlabel("mean of both (image units)", fontsize=8)
        axes.tick_params(labelbottom=True)
    handles, names = grid.flat[0].get_legend_handles_labels()
    figure.legend(handles, names, loc="outside lower left", ncols=6)
