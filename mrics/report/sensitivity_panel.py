"""Receive sensitivities as the study used them: modulus and phase of every channel of one plane."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.report.colours import MUTED, cyclic_map
from mrics.report.folder import StudyFolder
from mrics.report.panels import Panel
from mrics.report.words import number

_ACROSS = 8
_MOST = 32


def panel(study: StudyFolder) -> Panel | None:
    """The maps of the first scan that has several channels, None where none has."""
    for scan in study.scans:
        stored = study.find("sensitivities", scan["id"])
        if stored is not None and scan.get("receive"):
            return _panel(study, scan, stored.load()[0])
    return None


def _panel(study: StudyFolder, scan: dict[str, Any], volume: NDArray[Any]) -> Panel:
    view = study.view(scan)
    # One plane: turned, a channel is the only plane of its volume.
    maps = np.array([view.turn(volume[..., c])[0] for c in range(volume.shape[3])])
    receive = scan["receive"]
    shown = maps[:_MOST]
    several = sum(bool(other.get("receive")) for other in study.scans) > 1
    note = receive["note"][0].upper() + receive["note"][1:]
    text = (
        f"Receive sensitivities of {scan.get('name') or scan['id']}"
        f"{', the first of the scans' if several else ''}, slice {receive['plane']}: modulus "
        f"above, phase below, channel by channel. {note}; "
        f"{receive['noise']}. Dark grey: no channel was seen there."
    )
    if len(shown) < len(maps):
        text += f" The first {len(shown)} of {len(maps)} channels are shown."
    aspect = view.row_mm / view.column_mm
    across = min(_ACROSS, len(shown))
    bands = -(-len(shown) // across)
    tile = 6.4 / across
    height = tile * view.rows * aspect / view.columns
    return Panel(
        name="sensitivities",
        title="Receive sensitivities",
        text=text,
        size_in=(7.2, 2 * bands * (min(height, 2.4) + 0.06) + 0.25 * bands + 0.6),
        draw=lambda figure: _draw(figure, shown, across, aspect, view.ends),
        head=("Channel", "Largest modulus", "Mean modulus", "Share of the energy (%)"),
        rows=_rows(maps),
    )


def _rows(maps: NDArray[Any]) -> list[tuple[str, ...]]:
    size = np.abs(maps)
    energy = (size**2).sum(axis=(1, 2))
    seen = (size > 0).any(axis=0)
    return [
        (
            str(channel),
            number(size[channel].max()),
            number(size[channel][seen].mean() if seen.any() else 0.0),
            number(100 * energy[channel] / max(energy.sum(), 1e-300)),
        )
        for channel in range(len(maps))
    ]


def _draw(
    figure: Any,
    maps: NDArray[Any],
    across: int,
    aspect: float,
    ends: tuple[str, str, str, str],
) -> None:
    bands = -(-len(maps) // across)
    grid = figure.subplots(2 * bands, across, squeeze=False)
    top = float(np.abs(maps).max()) or 1.0
    grey: Any = {"cmap": "gray", "vmin": 0.0, "vmax": top, "aspect": aspect}
    turn: Any = {"cmap": cyclic_map(), "vmin": -180.0, "vmax": 180.0, "aspect": aspect}
    seen = (np.abs(maps) > 0).any(axis=0)
    first: list[Any] = [None, None]
    for place in range(bands * across):
        band, column = divmod(place, across)
        pair = grid[2 * band][column], grid[2 * band + 1][column]
        for axes in pair:
            axes.set_xticks([])
            axes.set_yticks([])
            axes.set_facecolor(MUTED)
            for spine in axes.spines.values():
                spine.set_visible(False)
        if place >= len(maps):
            for axes in pair:
                axes.set_visible(False)
            continue
        values = np.where(seen, maps[place], np.nan)
        first[0] = pair[0].imshow(np.abs(values), **grey)
        first[1] = pair[1].imshow(np.rad2deg(np.angle(values)), **turn)
        pair[0].set_title(f"channel {place}" if place == 0 else f"{place}", fontsize=8, pad=2)
        if column == 0:
            pair[0].set_ylabel("modulus", fontsize=8)
            pair[1].set_ylabel("phase", fontsize=8)
    if any(ends):
        grid[-1][0].set_xlabel(f"{ends[0]} – {ends[1]}, {ends[2]} above", fontsize=6, labelpad=1)
    half = across // 2 or 1
    scale = {"orientation": "horizontal", "shrink": 0.8, "aspect": 30, "pad": 0.02}
    left = grid[:, :half].ravel().tolist()
    right = grid[:, half:].ravel().tolist() or left
    figure.colorbar(first[0], ax=left, **scale).set_label(
        "modulus (whitened root sum of squares is 1)"
    )
    bar = figure.colorbar(first[1], ax=right, **scale)
    bar.set_label("phase (degrees)")
    bar.set_ticks([-180, -90, 0, 90, 180])
