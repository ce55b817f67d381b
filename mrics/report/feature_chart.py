"""Retained contrast of small inserted features by size and contrast, one table for each arm."""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.report.colours import INK
from mrics.report.folder import StudyFolder
from mrics.report.panels import Panel
from mrics.report.words import number

Kept = dict[tuple[float, float], float]


def panel(study: StudyFolder) -> Panel | None:
    """The chart, None where no study inserted any."""
    kept = kept_features(study)
    if not kept:
        return None
    labels = {arm["id"]: str(arm["label"]) for arm in study.arms}
    contrasts = {contrast for cells in kept.values() for _, contrast in cells}
    return Panel(
        name="features",
        title="Small features that survive",
        text="Share of the contrast of inserted features that is kept, by size and contrast, one "
        "panel for each arm; 1 is all of it.",
        size_in=(7.2, 0.95 + -(-len(kept) // 3) * (0.75 + 0.32 * len(contrasts))),
        draw=lambda figure: _draw(figure, study, kept),
        head=("Arm", "Size (mm)", "Contrast (%)", "Kept"),
        rows=[
            (labels[arm], *(number(v) for v in (size, contrast, value)))
            for arm, cells in kept.items()
            for (size, contrast), value in sorted(cells.items())
        ],
    )


def kept_features(study: StudyFolder) -> dict[str, Kept]:
    """Retained share by (size in mm, contrast in %) of every arm, mean over its units."""
    out: dict[str, Kept] = {}
    for arm in study.arms:
        values: dict[tuple[float, float], list[float]] = {}
        for table in study.measures(arm["id"]):
            for row in table.get("features") or []:
                if row.get("retained") is not None and row.get("inserted_mm") is not None:
                    key = (round(float(row["inserted_mm"]), 1), float(row["contrast"]))
                    values.setdefault(key, []).append(float(row["retained"]))
        if values:
            out[arm["id"]] = {key: float(np.mean(v)) for key, v in values.items()}
    return out


def _draw(figure: Any, study: StudyFolder, kept: dict[str, Kept]) -> None:
    sizes = sorted({size for cells in kept.values() for size, _ in cells})
    contrasts = sorted({contrast for cells in kept.values() for _, contrast in cells}, key=abs)
    labels = {arm["id"]: str(arm["label"]) for arm in study.arms}
    columns = min(3, len(kept))
    grid = figure.subplots(-(-len(kept) // columns), columns, squeeze=False)
    for axes, (arm, cells) in zip(grid.flat, kept.items(), strict=False):
        table = np.array([[cells.get((s, c), np.nan) for s in sizes] for c in contrasts])
        shown = axes.imshow(table, cmap="cividis", vmin=0, vmax=1, aspect="auto")
        for (row, column), value in np.ndenumerate(table):
            if np.isfinite(value):
                ink = "white" if value < 0.55 else INK
                text = f"{value:.2f}".replace("-", "−")
                axes.text(column, row, text, ha="center", va="center", color=ink, fontsize=8)
        axes.set_xticks(range(len(sizes)), [number(s, 2) for s in sizes])
        axes.set_yticks(range(len(contrasts)), [f"{c:g}".replace("-", "−") for c in contrasts])
        axes.set_title(labels[arm], fontsize=8)
    for axes in list(grid.flat)[len(kept) :]:
        axes.set_axis_off()
    for axes in grid[:, 0]:
        axes.set_ylabel("contrast (%)")
    for axes in grid.flat[max(0, len(kept) - columns) : len(kept)]:
        axes.set_xlabel("size (mm)")
    look = {"location": "bottom", "shrink": 0.5, "aspect": 40}
    bar = figure.colorbar(shown, ax=grid.ravel().tolist(), **look)
    bar.set_label("contrast kept (1 = all)")
