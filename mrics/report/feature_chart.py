"""Retained contrast of small inserted features by size and contrast, one table for each arm."""

from __future__ import annotations

import textwrap
from typing import Any

import numpy as np

from mrics.report.colours import INK
from mrics.report.folder import StudyFolder
from mrics.report.panels import Panel
from mrics.report.summary import limits_of
from mrics.report.words import number

Cell = tuple[str, float, float]
Kept = dict[Cell, float]


def panel(study: StudyFolder) -> Panel | None:
    """The chart, None where no study inserted any."""
    kept = kept_features(study)
    if not kept:
        return None
    labels = {arm["id"]: str(arm["label"]) for arm in study.arms}
    rows = {(shape, contrast) for cells in kept.values() for shape, contrast, _ in cells}
    level = _limit(study)
    framed = f"; framed cells reach the limit of {number(level, 2)}" if level is not None else ""
    return Panel(
        name="features",
        title="Small features that survive",
        text="Share of the contrast of inserted features that is kept, by contrast and size, one "
        f"panel for each arm; 1 is all of it{framed}.",
        size_in=(7.2, 0.95 + -(-len(kept) // 3) * (0.9 + 0.32 * len(rows))),
        draw=lambda figure: _draw(figure, study, kept),
        head=("Arm", "Shape", "Contrast (%)", "Size (mm)", "Kept"),
        rows=[
            (labels[arm], shape, *(number(v) for v in (contrast, size, value)))
            for arm, cells in kept.items()
            for (shape, contrast, size), value in sorted(cells.items())
        ],
    )


def kept_features(study: StudyFolder) -> dict[str, Kept]:
    """Retained share by (shape, contrast in %, size in mm) of every arm, mean over its units."""
    out: dict[str, Kept] = {}
    for arm in study.arms:
        values: dict[Cell, list[float]] = {}
        for table in study.measures(arm["id"]):
            for row in table.get("features") or []:
                if row.get("retained") is not None and row.get("nominal_mm") is not None:
                    key = (str(row["shape"]), float(row["contrast"]), float(row["nominal_mm"]))
                    values.setdefault(key, []).append(float(row["retained"]))
        if values:
            out[arm["id"]] = {key: float(np.mean(v)) for key, v in values.items()}
    return out


def _limit(study: StudyFolder) -> float | None:
    """The protocol's limit on the kept share."""
    asked = (x.value for x in limits_of(study) if x.key == "feature_retention_min")
    return next(asked, None)


def _draw(figure: Any, study: StudyFolder, kept: dict[str, Kept]) -> None:
    sizes = sorted({size for cells in kept.values() for *_, size in cells})
    rows = sorted(
        {(shape, contrast) for cells in kept.values() for shape, contrast, _ in cells},
        key=lambda row: (row[0], abs(row[1]), row[1]),
    )
    several = len({shape for shape, _ in rows}) > 1
    names = [f"{shape} {c:+g}" if several else f"{c:+g}" for shape, c in rows]
    level = _limit(study)
    labels = {arm["id"]: str(arm["label"]) for arm in study.arms}
    columns = min(3, len(kept))
    grid = figure.subplots(-(-len(kept) // columns), columns, squeeze=False)
    for axes, (arm, cells) in zip(grid.flat, kept.items(), strict=False):
        table = np.array([[cells.get((*row, size), np.nan) for size in sizes] for row in rows])
        shown = axes.imshow(table, cmap="cividis", vmin=0, vmax=1, aspect="auto")
        for (row, column), value in np.ndenumerate(table):
            if np.isfinite(value):
                ink = "white" if value < 0.55 else INK
                text = f"{value:.2f}".replace("-", "−")
                axes.text(column, row, text, ha="center", va="center", color=ink, fontsize=8)
                if level is not None and value >= level:
                    _frame(axes, row, column)
        axes.set_xticks(range(len(sizes)), [number(s, 2) for s in sizes])
        axes.set_yticks(range(len(rows)), [name.replace("-", "−") for name in names])
        axes.set_title("\n".join(textwrap.wrap(labels[arm], 28)[:2]), fontsize=8)
    for axes in list(grid.flat)[len(kept) :]:
        axes.set_axis_off()
    for axes in grid[:, 0]:
        axes.set_ylabel("contrast (%)")
    for axes in grid.flat[max(0, len(kept) - columns) : len(kept)]:
        axes.set_xlabel("size (mm)")
    look = {"location": "bottom", "shrink": 0.5, "aspect": 40}
    bar = figure.colorbar(shown, ax=grid.ravel().tolist(), **look)
    bar.set_label("contrast kept (1 = all)")


def _frame(axes: Any, row: int, column: int) -> None:
    from matplotlib.patches import Rectangle

    corner = (column - 0.44, row - 0.4)
    axes.add_patch(Rectangle(corner, 0.88, 0.8, fill=False, edgecolor=INK, lw=1.3))
