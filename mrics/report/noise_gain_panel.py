"""Noise gain maps (g-factor) of the arms, with percentiles inside the body."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.report.colours import MUTED, one_signed_map
from mrics.report.folder import StoredMap, StudyFolder
from mrics.report.panels import Panel
from mrics.report.pictures import studied
from mrics.report.words import number

PERCENTILES = (50, 75, 95, 99)
_ACROSS = 4
#: a gain beyond this is lost in noise whatever its value; scales stop here
_TOP = 4.0


@dataclass(frozen=True)
class _Gain:
    """One map: (rows, columns) with NaN outside the body, and what it is."""

    label: str
    title: str
    source: str
    acceleration: float
    slice: int
    image: NDArray[np.float32]
    percentiles: tuple[float, ...]
    largest: float
    aspect: float


def panel(study: StudyFolder) -> Panel | None:
    """Maps of the first scan of every arm that has one, None where no arm has."""
    found = [gain for arm in study.arms for gain in _of_arm(study, arm)]
    if not found:
        return None
    across = min(_ACROSS, len(found))
    rows, columns = found[0].image.shape
    tile = 6.0 / across
    height = min(tile * rows * found[0].aspect / columns, 3.0)
    return Panel(
        name="noise-gain",
        title="Noise gain",
        text="Noise gain g inside the body, on the slice with the largest 95th percentile; "
        "percentiles below are over all slices. It is the arm's noise over that of a full scan, "
        "divided by the root of the acceleration, so 1 is what fewer samples alone cost. Analytic "
        "for unfold, with the acceleration of its lattice; otherwise measured by noise replicas, "
        "with the acceleration achieved, and for recoveries that are not linear it holds for this "
        "image at this noise only.",
        size_in=(7.2, -(-len(found) // across) * (height + 0.55) + 0.7),
        draw=lambda figure: _draw(figure, found, across),
        head=(
            "Arm",
            "How",
            "R",
            *(f"{share}th percentile" for share in PERCENTILES),
            "Largest",
        ),
        rows=[
            (
                gain.label,
                gain.source,
                number(gain.acceleration),
                *(number(value) for value in gain.percentiles),
                number(gain.largest),
            )
            for gain in found
        ],
    )


def _of_arm(study: StudyFolder, arm: dict[str, Any]) -> list[_Gain]:
    """The analytic map of an arm where there is one, else the measured one."""
    for kind, source in (("noise_gain", "analytic"), ("noise_ratio", "replicas")):
        stored = study.find(kind, arm=arm["id"])
        if stored is None:
            continue
        units = [u for u in study.units(arm["id"], stored.scan) if u["draw"] == stored.draw]
        achieved = float(units[0]["acceleration"]) if units else float(arm["acceleration"])
        analytic = (units[0].get("noise_gain") or {}) if units else {}
        acceleration = achieved
        if kind == "noise_gain":
            acceleration = float(analytic.get("acceleration") or achieved)
        one = _gain(study, arm, stored, source, acceleration)
        return [one] if one else []
    return []


def _gain(
    study: StudyFolder, arm: dict[str, Any], stored: StoredMap, source: str, acceleration: float
) -> _Gain | None:
    scan = study.scan(stored.scan)
    body = study.find("body", scan["id"])
    planes = studied(scan)
    values = np.abs(study.planes(stored, planes)).astype(np.float32)
    if source == "replicas":
        values = values / np.float32(np.sqrt(acceleration))
    inside = np.isfinite(values) & (values > 0)
    if body is not None:
        inside &= study.planes(body, planes) > 0
    counts = inside.sum(axis=(1, 2))
    if not counts.any():
        return None
    values = np.where(inside, values, np.nan)
    full = np.flatnonzero(counts >= 0.5 * counts.max())
    tops = [float(np.percentile(values[p][inside[p]], 95)) for p in full]
    chosen = int(full[int(np.argmax(tops))])
    view = study.view(scan)
    every = values[inside]
    today = ", in use today" if arm.get("today") else ""
    return _Gain(
        label=str(arm["label"]),
        title=f"{arm['label']}{today}",
        source=source,
        acceleration=acceleration,
        slice=planes[chosen],
        image=values[chosen],
        percentiles=tuple(float(v) for v in np.percentile(every, PERCENTILES)),
        largest=float(every.max()),
        aspect=view.row_mm / view.column_mm,
    )


def _draw(figure: Any, found: list[_Gain], across: int) -> None:
    rows = -(-len(found) // across)
    grid = figure.subplots(rows, across, squeeze=False)
    top = min(max(max(gain.percentiles[-1] for gain in found), 1.1), _TOP)
    shown = None
    for place, axes in enumerate(grid.ravel()):
        axes.set_xticks([])
        axes.set_yticks([])
        for spine in axes.spines.values():
            spine.set_visible(False)
        if place >= len(found):
            axes.set_visible(False)
            continue
        gain = found[place]
        axes.set_facecolor("#eceff1")
        shown = axes.imshow(
            gain.image, cmap=one_signed_map(), vmin=1.0, vmax=top, aspect=gain.aspect
        )
        axes.set_title(_folded(gain.title, 80 // across + 4), fontsize=8)
        axes.set_xlabel(
            f"R {number(gain.acceleration)}, slice {gain.slice}, {gain.source}\n"
            f"median {number(gain.percentiles[0])}, 95 % {number(gain.percentiles[2])}",
            fontsize=7,
        )
    bar = figure.colorbar(
        shown, ax=grid.ravel().tolist(), orientation="horizontal", shrink=0.6, aspect=40, pad=0.02,
        extend="max",
    )  # fmt: skip
    bar.set_label("noise gain g (one scale for all arms; darkest: 1 or less)")
    bar.outline.set_edgecolor(MUTED)


def _folded(text: str, width: int) -> str:
    import textwrap

    return "\n".join(textwrap.wrap(text, width))
