"""Error by spatial frequency, one curve for each arm."""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.report.charts import families, family_of
from mrics.report.colours import GRID
from mrics.report.folder import StudyFolder
from mrics.report.panels import Panel
from mrics.report.words import number

_STYLES = ("-", "--", "-.", ":")


def panel(study: StudyFolder) -> Panel | None:
    """The chart, None where no unit measured it."""
    curves = spectral_curves(study)
    if not curves:
        return None
    labels = {arm["id"]: str(arm["label"]) for arm in study.arms}
    return Panel(
        name="spectral",
        title="Error by fineness of detail",
        text="Error relative to the reference by spatial frequency, one curve for each arm; fine "
        "detail lies to the right, and at 1 the error is as large as the image itself.",
        size_in=(7.2, 3.0 + 0.19 * -(-len(curves) // 2)),
        draw=lambda figure: _draw(figure, study, curves),
        head=("Arm", "Frequency (cycles per mm)", "Error / reference"),
        rows=[
            (labels[arm], number(where), number(value))
            for arm, curve in curves.items()
            for where, value in zip(*curve, strict=True)
        ],
        lines=True,
    )


def spectral_curves(study: StudyFolder) -> dict[str, tuple[Any, Any]]:
    """Frequency (cycles/mm) and relative error of every arm, mean over its units.

    Units of one arm on one grid are averaged ring by ring; the first grid counts.
    """
    curves = {}
    for arm in study.arms:
        tables = [t["spectral"] for t in study.measures(arm["id"]) if t.get("spectral")]
        if not tables:
            continue
        frequency = np.asarray(tables[0]["frequency"], dtype=float)
        alike = [
            np.asarray([np.nan if v is None else v for v in t["relative"]], dtype=float)
            for t in tables
            if t["frequency"] == tables[0]["frequency"]
        ]
        curves[arm["id"]] = (frequency, np.mean(alike, axis=0))
    return curves


def _draw(figure: Any, study: StudyFolder, curves: dict[str, tuple[Any, Any]]) -> None:
    looks = families(study)
    seen: dict[str, int] = {}
    axes = figure.subplots()
    for arm in study.arms:
        if arm["id"] not in curves:
            continue
        family = family_of(arm)
        turn = seen[family] = seen.get(family, -1) + 1
        look = {"color": looks[family][0], "ls": _STYLES[turn % len(_STYLES)]}
        width = 2.2 if arm.get("today") else 1.3
        label = f"{arm['label']}, in use today" if arm.get("today") else arm["label"]
        axes.plot(*curves[arm["id"]], lw=width, label=label, **look)
    axes.set_ylim(0, None)
    axes.set_xlim(0, None)
    axes.set_xlabel("spatial frequency (cycles per mm)")
    axes.set_ylabel("error / reference, per ring of k-space")
    axes.axhline(1.0, color=GRID, lw=0.8)
    axes.grid(axis="y")
    figure.legend(loc="outside lower left", ncols=2, handlelength=2.6)
