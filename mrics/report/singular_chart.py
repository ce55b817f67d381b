"""How many channels carry the calibration data's energy: singular values and energy kept."""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.report.colours import MARKERS, MUTED, SERIES
from mrics.report.folder import StudyFolder
from mrics.report.panels import Panel
from mrics.report.words import number


def panel(study: StudyFolder) -> Panel | None:
    """The curve of every scan with several channels, None where none has."""
    found = [s for s in study.scans if len((s.get("receive") or {}).get("singular_values", ())) > 1]
    if not found:
        return None
    virtual = found[0]["receive"]["virtual"]
    planes = found[0]["receive"]["curve_planes"]
    text = (
        "Singular values of the whitened centre of full k-space over its channels, relative to the "
        f"largest ({planes} slices), and the share of energy that so many virtual channels leave "
        "out. "
    )
    if virtual is None:
        text += "Every arm was recovered from all channels."
    else:
        kept = ", ".join(
            f"{100 * _energy(s)[min(virtual, len(_energy(s))) - 1]:.2f} %" for s in found
        )
        text += (
            f"Every arm was recovered from {virtual} virtual channels, which keep {kept} of it; "
            "what its own calibration lines kept is said with the arm."
        )
    return Panel(
        name="singular-values",
        title="Energy in the receive channels",
        text=text,
        size_in=(7.2, 2.7 + (0.19 * -(-len(found) // 2) if len(found) > 1 else 0.0)),
        draw=lambda figure: _draw(figure, found, virtual),
        head=("Scan", "Virtual channels", "Singular value / largest", "Energy kept (%)"),
        rows=[
            (
                str(scan.get("name") or scan["id"]),
                str(count + 1),
                number(value),
                f"{100 * kept:.3f}",
            )
            for scan in found
            for count, (value, kept) in enumerate(zip(_relative(scan), _energy(scan), strict=True))
        ],
    )


def _relative(scan: dict[str, Any]) -> Any:
    values = np.asarray(scan["receive"]["singular_values"], dtype=float)
    return values / max(values[0], 1e-300)


def _energy(scan: dict[str, Any]) -> Any:
    square = _relative(scan) ** 2
    return np.cumsum(square) / square.sum()


def _draw(figure: Any, scans: list[dict[str, Any]], virtual: int | None) -> None:
    left, right = figure.subplots(1, 2)
    for place, scan in enumerate(scans):
        look: dict[str, Any] = {"color": SERIES[place % len(SERIES)], "ms": 4, "lw": 1.2}
        look["marker"] = MARKERS[place % len(MARKERS)]
        count = np.arange(1, len(_relative(scan)) + 1)
        left.plot(count, _relative(scan), label=str(scan.get("name") or scan["id"]), **look)
        lost = 100 * np.maximum(1 - _energy(scan), 0)
        right.plot(count[:-1], lost[:-1], **look)
    for axes in (left, right):
        axes.set_yscale("log")
        axes.yaxis.set_major_formatter(lambda value, _: f"{value:g}")
        axes.yaxis.set_minor_formatter(lambda value, _: "")
        axes.set_xlabel("virtual channels")
        axes.xaxis.get_major_locator().set_params(integer=True)
        axes.grid(axis="y")
        if virtual is not None:
            axes.axvline(virtual, color=MUTED, lw=1, ls="--")
    left.set_xlabel("number of the singular value")
    left.set_ylabel("singular value / largest")
    right.set_ylabel("energy left out (%)")
    if virtual is not None:
        right.text(
            virtual, 1.0, " used", transform=right.get_xaxis_transform(), va="top", color=MUTED
        )
    if len(scans) > 1:
        figure.legend(loc="outside lower left", ncols=2, handlelength=2.0)
