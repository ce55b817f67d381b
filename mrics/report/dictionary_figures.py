"""The dictionary of an arm as pictures: atoms by use, how often each is used, where it fits."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.report.arms import ArmView
from mrics.report.colours import SERIES
from mrics.report.folder import StudyFolder
from mrics.report.style_figures import figure_style, new_figure
from mrics.report.summary import shown_slices
from mrics.report.words import number

#: atoms on the sheet, and in one row of it
_SHOWN, _ROW = 256, 32
#: maps beside the sheet: kind, title, unit
_MAPS = (
    ("residual", "residual / noise", "rms of a patch / sigma"),
    ("atoms_per_patch", "atoms per patch", "atoms, both parts"),
    ("domain_map", "against training", "residual / 95 % point"),
)


@dataclass(frozen=True)
class DictionaryPicture:
    """What is drawn of an arm's dictionary.

    Attributes
    ----------
    atoms : ndarray of shape (u, v, layer, atom)
        Most used first.
    counts : ndarray of shape (atom,)
        Uses, in the same order.
    maps : list of (title, unit, ndarray of shape (rows, columns))
        Values from 0 up, of one slice.
    aspect : float
        Voxel height / width of the maps.
    text : str
        What the pictures show, in words.
    """

    atoms: NDArray[Any]
    counts: NDArray[Any]
    maps: list[tuple[str, str, NDArray[Any]]]
    aspect: float
    text: str


def dictionary_picture(study: StudyFolder, view: ArmView) -> DictionaryPicture | None:
    """Picture of an arm's dictionary, None for an arm without one."""
    shown = view.pictures
    if shown is None:
        return None
    scan = shown.scan.entry["id"]
    sheet, use = (
        study.find(kind, scan, view.row["id"], shown.draw) for kind in ("atoms", "atom_use")
    )
    if sheet is None or use is None:
        return None
    atoms, counts = sheet.load()[0], use.load()[0].ravel()
    units = [u for u in study.units(view.row["id"], scan) if u["draw"] == shown.draw]
    sigma = float(units[0]["certificate"].get("sigma") or 0.0) if units else 0.0
    target = units[0]["certificate"].get("weight") if units else None
    worst = shown_slices(study, view.row["id"], scan, shown.draw).get("worst")
    maps: list[tuple[str, str, NDArray[Any]]] = []
    for kind, title, unit in _MAPS:
        stored = study.find(kind, scan, view.row["id"], shown.draw)
        if stored is not None and worst is not None:
            plane = study.planes(stored, [int(worst["index"])], int(worst.get("frame") or 0))[0]
            if kind == "residual":
                plane = plane / sigma if sigma > 0 else plane
            maps.append((title, unit, np.abs(plane)))
    used = int(np.count_nonzero(counts))
    share = float(counts[: max(1, len(counts) // 10)].sum() / max(1, counts.sum()))
    where = f"slice {worst['index']} (worst)" if worst else "no slice"
    layers = "" if atoms.ndim < 4 or atoms.shape[2] == 1 else ", first plane of each"
    cut = f" Of {len(counts)} atoms the {_SHOWN} most used are shown." * (len(counts) > _SHOWN)
    text = (
        f"Dictionary of {shown.scan.entry['name']}, draw {shown.draw}: atoms of "
        f"{atoms.shape[0]} × {atoms.shape[1]} samples, most used first{layers}, each on its own "
        f"grey scale with zero in the middle.{cut} {used} of {len(counts)} atoms are used; the "
        f"most used tenth makes {number(100 * share, 2)} % of all uses. Maps: {where}"
        + (f", noise sigma {number(sigma)}" if sigma > 0 else "")
        + f". The error target of a patch is {number(target)} × the noise; more is what the atoms "
        "allowed did not take up."
        + (
            " Above 1 against training, a patch codes worse than 95 % of the training's patches: "
            "detail there may be removed or invented (0: too little signal to judge)."
            if any(title == "against training" for title, _, _ in maps)
            else ""
        )
    )
    return DictionaryPicture(atoms, counts, maps, view.aspect, text)


def atom_sheet(atoms: NDArray[Any]) -> NDArray[np.float64]:
    """Atoms (u, v, layer, atom) side by side, 32 in a row, NaN between them.

    Every atom (the first layer, the real part) is divided by its largest modulus.
    """
    tiles = np.real(atoms.reshape(*atoms.shape[:2], -1, atoms.shape[-1])[:, :, 0, :_SHOWN])
    u, v, count = tiles.shape
    rows, columns = -(-count // _ROW), min(count, _ROW)
    sheet = np.full((rows * (u + 1) - 1, columns * (v + 1) - 1), np.nan)
    for k in range(count):
        top, left = k // _ROW * (u + 1), k % _ROW * (v + 1)
        tile = tiles[:, :, k]
        sheet[top : top + u, left : left + v] = tile / (np.abs(tile).max() or 1.0)
    return sheet


def dictionary_figure(picture: DictionaryPicture) -> Any:
    """Figure of :func:`draw_dictionary`."""
    sheet = atom_sheet(picture.atoms)
    with figure_style():
        figure = new_figure(7.2, 6.8 * sheet.shape[0] / sheet.shape[1] + 2.9)
        draw_dictionary(figure, picture)
    return figure


def draw_dictionary(figure: Any, picture: DictionaryPicture) -> None:
    """Sheet of atoms above, use by rank and maps of one slice below.

    Parameters
    ----------
    figure : Figure or SubFigure
        Where to draw.
    picture : DictionaryPicture
        What to draw.
    """
    sheet, counts, maps = atom_sheet(picture.atoms), picture.counts, picture.maps
    tall = 6.8 * sheet.shape[0] / sheet.shape[1]
    top, bottom = figure.subfigures(2, 1, height_ratios=(tall + 0.35, 2.55))
    axes = top.subplots()
    axes.imshow(sheet, cmap="gray", vmin=-1, vmax=1)
    axes.set_title("atoms, most used first")
    axes.set_axis_off()
    left, right = bottom.subfigures(1, 2, width_ratios=(1.3, max(1, len(maps))))
    first = left.subplots()
    total = max(1.0, float(counts.sum()))
    edges = np.arange(len(counts) + 1) + 0.5
    first.stairs(100 * counts / total, edges, fill=True, color=SERIES[0])
    first.set_ylim(0, None)
    first.set_title("use of atoms")
    first.set_xlabel("rank of the atom")
    first.set_ylabel("share of all uses (%)")
    first.set_xlim(0.5, len(counts) + 0.5)
    panels = right.subplots(1, len(maps), squeeze=False)[0] if maps else ()
    for panel, (title, unit, plane) in zip(panels, maps, strict=True):
        high = float(np.percentile(plane, 99.5)) or 1.0
        if title != "atoms per patch":
            high = max(high, 1.0)
        shown = panel.imshow(plane, cmap="cividis", vmin=0, vmax=high, aspect=picture.aspect)
        panel.set_title(title)
        panel.set_xticks([])
        panel.set_yticks([])
        bar = right.colorbar(
            shown, ax=panel, orientation="horizontal", shrink=0.9, pad=0.02, extend="max"
        )
        bar.set_label(unit, fontsize=8)
        bar.ax.tick_params(labelsize=7)
