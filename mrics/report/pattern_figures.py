"""Pictures of sampling patterns: positions, density, and what they do to a point (PSF)."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.numerics import centred_ifft
from mrics.report.colours import INK, MUTED, SERIES
from mrics.report.style_figures import figure_style, new_figure

_FLOOR_DB = -60.0


@dataclass(frozen=True)
class PatternPicture:
    """A mask as the page draws it.

    Attributes
    ----------
    mask : ndarray of bool, shape (n,) or (rows, columns)
        Acquired positions, zero frequency at N//2.
    row_label, column_label : str
        Names of the axes ("phase (j)").
    probability : ndarray of float or None
        Inclusion probability the pattern was drawn from, shape of mask.
    """

    mask: NDArray[np.bool_]
    row_label: str = "phase"
    column_label: str = "partition"
    probability: NDArray[np.float64] | None = None

    @property
    def one_dimensional(self) -> bool:
        """A pattern of lines along one phase axis."""
        return self.mask.ndim == 1


def point_spread(mask: NDArray[np.bool_]) -> NDArray[np.float64]:
    """Size of the point spread of a pattern, peak 1, centre at N//2.

    The transform of the mask divided by its sum: how a point looks in the zero-filled image.
    """
    spread = np.abs(centred_ifft(mask.astype(complex), tuple(range(-mask.ndim, 0))))
    return spread / (mask.sum() / np.sqrt(mask.size))


def largest_side_value(spread: NDArray[np.float64]) -> tuple[float, tuple[int, ...]]:
    """Largest value of a point spread away from its main lobe, and its distance in voxels.

    The main lobe is walked down from the centre along every axis to its first rise; what lies
    outside the box of those half-widths is searched.
    """
    centre = tuple(n // 2 for n in spread.shape)
    outside = np.ones(spread.shape, dtype=bool)
    box = []
    for axis, middle in enumerate(centre):
        line = np.moveaxis(spread, axis, 0)[(slice(None), *np.delete(centre, axis))]
        upward = line[middle:]
        rise = np.flatnonzero(np.diff(upward) > 0)
        width = int(rise[0]) if rise.size else 0
        box.append(slice(max(0, middle - width), middle + width + 1))
    outside[tuple(box)] = False
    if not outside.any():
        return 0.0, tuple(0 for _ in centre)
    at = np.unravel_index(np.argmax(np.where(outside, spread, -1.0)), spread.shape)
    return float(spread[at]), tuple(int(i - c) for i, c in zip(at, centre, strict=True))


def radial_density(share: NDArray[Any]) -> tuple[NDArray[Any], NDArray[Any]]:
    """Mean of a mask (or of inclusion probabilities) by distance from the centre of k-space.

    Returns
    -------
    tuple of ndarray
        Distance, 1 at the edge of an axis, and mean; bins hold about six positions of a line
        pattern (three on either side), or are a fortieth wide in 2-D.
    """
    axes = [(np.arange(n) - n // 2) / max(1.0, n / 2) for n in share.shape]
    radius = np.sqrt(sum(g**2 for g in np.meshgrid(*axes, indexing="ij")))
    if share.ndim == 1:
        count = max(4, share.size // 6)
    else:
        count = int(np.clip(min(share.shape) // 4, 8, 40))
    edges = np.linspace(0, radius.max() + 1e-9, count + 1)
    bins = np.digitize(radius.ravel(), edges) - 1
    total = np.bincount(bins, minlength=count)[:count]
    taken = np.bincount(bins, weights=share.ravel(), minlength=count)[:count]
    keep = total > 0
    return ((edges[:-1] + edges[1:]) / 2)[keep], (taken[keep] / total[keep])


def draw_pattern_panels(axes: Any, picture: PatternPicture, figure: Any) -> None:
    """Draw positions, density and point spread into three axes."""
    _positions(axes[0], picture)
    _density(axes[1], picture)
    if picture.one_dimensional:
        _spread_line(axes[2], picture)
    else:
        _spread_plane(axes[2], picture, figure)


def pattern_figure(picture: PatternPicture) -> Any:
    """One figure of positions, density and point spread."""
    with figure_style():
        figure = new_figure(7.2, 2.5)
        draw_pattern_panels(figure.subplots(1, 3, width_ratios=(1, 1, 1.15)), picture, figure)
    return figure


def _positions(axes: Any, picture: PatternPicture) -> None:
    mask = picture.mask
    shown = np.repeat(mask[:, None], max(8, mask.size // 2), 1) if mask.ndim == 1 else mask
    rows, columns = shown.shape
    edges = (-(columns // 2) - 0.5, columns - columns // 2 - 0.5)
    heights = (-(rows // 2) - 0.5, rows - rows // 2 - 0.5)
    axes.imshow(
        shown, cmap="gray", vmin=0, vmax=1, extent=(*edges, *heights), origin="lower", aspect="auto"
    )
    axes.set_title("acquired (white)")
    axes.set_ylabel(f"{picture.row_label}, index from centre")
    if picture.one_dimensional:
        axes.set_xticks([])
        axes.set_xlabel("readout, all samples")
    else:
        axes.set_xlabel(f"{picture.column_label}, index from centre")
        axes.set_aspect("equal" if 0.4 < rows / columns < 2.5 else "auto")


def _density(axes: Any, picture: PatternPicture) -> None:
    where, share = radial_density(picture.mask)
    axes.step(where, 100 * share, where="mid", color=SERIES[0], lw=1.3, label="this draw")
    if picture.probability is not None:
        where, law = radial_density(picture.probability)
        axes.plot(where, 100 * law, color=INK, lw=1.0, ls="--", label="law")
        axes.legend(loc="upper right")
    axes.set_ylim(0, 105)
    axes.set_xlim(0, None)
    axes.set_title("density")
    axes.set_ylabel("positions acquired (%)")
    axes.set_xlabel("distance from centre (1 = edge)")
    axes.grid(axis="y")


def _spread_line(axes: Any, picture: PatternPicture) -> None:
    spread = point_spread(picture.mask)
    distance = np.arange(spread.size) - spread.size // 2
    axes.plot(distance, _decibel(spread), color=SERIES[0], lw=0.8)
    peak, at = largest_side_value(spread)
    axes.plot([at[0]], _decibel(np.array([peak])), "v", color=SERIES[1], ms=6)
    axes.set_ylim(_FLOOR_DB, 3)
    axes.set_title(f"point spread, side {100 * peak:.1f} % at {at[0]:+d}".replace("-", "−"))
    axes.set_ylabel("dB of the peak")
    axes.set_xlabel(f"voxels along {picture.row_label}")
    axes.grid(axis="y")


def _spread_plane(axes: Any, picture: PatternPicture, figure: Any) -> None:
    spread = point_spread(picture.mask)
    rows, columns = spread.shape
    extent = (
        -(columns // 2) - 0.5,
        columns - columns // 2 - 0.5,
        -(rows // 2) - 0.5,
        rows - rows // 2 - 0.5,
    )
    shown = axes.imshow(
        _decibel(spread), cmap="cividis", vmin=_FLOOR_DB, vmax=0, extent=extent, origin="lower"
    )
    axes.set_aspect("equal" if 0.4 < rows / columns < 2.5 else "auto")
    bar = figure.colorbar(shown, ax=axes, shrink=0.9)
    bar.set_label("dB of the peak")
    bar.outline.set_edgecolor(MUTED)
    peak, at = largest_side_value(spread)
    axes.set_title(f"point spread, side {100 * peak:.1f} %")
    axes.set_ylabel(f"voxels along {picture.row_label}")
    axes.set_xlabel(f"voxels along {picture.column_label}")
    axes.plot([at[1]], [at[0]], "o", ms=8, mfc="none", mec="white", mew=1.0)


def _decibel(spread: NDArray[np.float64]) -> NDArray[np.float64]:
    return 20 * np.log10(np.maximum(spread, 10 ** (_FLOOR_DB / 20)))
