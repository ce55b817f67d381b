"""Charts of the further measures: error by spatial frequency, kept features by size and contrast.

They are drawn from the ``measures`` that units of a study carry, where a protocol asked for them.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.report.charts import families, family_of
from mrics.report.colours import GRID, INK
from mrics.report.folder import StudyFolder
from mrics.report.style_figures import figure_style, new_figure
from mrics.report.words import number

_STYLES = ("-", "--", "-.", ":")
Kept = dict[tuple[float, float], float]


def spectral_curves(study: StudyFolder) -> dict[str, tuple[Any, Any]]:
    """Frequency (cycles/mm) and relative error of every arm, mean over its units.

    Units of one arm on one grid are averaged ring by ring; the first grid counts.
    """
    curves = {}
    for arm in study.arms:
        tables = [t["spectral"] for t in _tables(study, arm["id"]) if t.get("spectral")]
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


def kept_features(study: StudyFolder) -> dict[str, Kept]:
    """Retained share by (size in mm, contrast in %) of every arm, mean over its units."""
    out: dict[str, Kept] = {}
    for arm in study.arms:
        values: dict[tuple[float, float], list[float]] = {}
        for table in _tables(study, arm["id"]):
            for row in table.get("features") or []:
                if row.get("retained") is not None and row.get("inserted_mm") is not None:
                    key = (round(float(row["inserted_mm"]), 1), float(row["contrast"]))
                    values.setdefault(key, []).append(float(row["retained"]))
        if values:
            out[arm["id"]] = {key: float(np.mean(v)) for key, v in values.items()}
    return out


def spectral_figure(study: StudyFolder) -> Any:
    """Figure of :func:`draw_spectral`; None where no study measured it."""
    curves = spectral_curves(study)
    if not curves:
        return None
    with figure_style():
        figure = new_figure(7.2, 3.0 + 0.19 * -(-len(curves) // 2))
        draw_spectral(figure, study)
    return figure


def draw_spectral(figure: Any, study: StudyFolder) -> None:
    """Error by spatial frequency, one curve for each arm."""
    curves = spectral_curves(study)
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


def feature_figure(study: StudyFolder) -> Any:
    """Figure of :func:`draw_features`; None where no study inserted any."""
    kept = kept_features(study)
    if not kept:
        return None
    contrasts = {contrast for cells in kept.values() for _, contrast in cells}
    rows = -(-len(kept) // 3)
    with figure_style():
        figure = new_figure(7.2, 0.95 + rows * (0.75 + 0.32 * len(contrasts)))
        draw_features(figure, study)
    return figure


def draw_features(figure: Any, study: StudyFolder) -> None:
    """Retained contrast of inserted features by size and contrast, one panel for each arm."""
    kept = kept_features(study)
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


def _tables(study: StudyFolder, arm: str) -> list[dict[str, Any]]:
    return [u["measures"] for u in study.units(arm) if u.get("measures")]
