"""Pictures of sampling patterns: positions, density, and what they do to a point (PSF)."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.report.colours import INK, MUTED, SERIES
from mrics.report.style_figures import figure_style, new_figure
from mrics.sampling import Pattern, Spread, spread

_FLOOR_DB = -60.0


@dataclass(frozen=True)
class PatternPicture:
    """A pattern as the page draws it (the first frame where frames differ).

    Attributes
    ----------
    pattern : Pattern
        One frame.
    row_label, column_label : str
        Names of its axes ("phase (j)").
    echo : ndarray of int, shape of the mask, or None
        Echo of the train that acquires each position, from 1; 0 where nothing is acquired.
    energy : ndarray of float64, shape of the mask, or None
        Mean k-space energy of training scans, for the share of it that is captured.
    """

    pattern: Pattern
    row_label: str = "phase"
    column_label: str = "partition"
    echo: NDArray[np.int64] | None = None
    energy: NDArray[np.float64] | None = None

    @property
    def mask(self) -> NDArray[np.bool_]:
        """Acquired positions."""
        return self.pattern.mask

    @property
    def one_dimensional(self) -> bool:
        """A pattern of lines along one phase axis."""
        return self.mask.ndim == 1

    @cached_property
    def spread(self) -> Spread:
        """What the pattern does to a point."""
        return spread(self.pattern, self.energy)

    @property
    def sentence(self) -> str:
        """What the pictures show, in words."""
        facts = self.spread
        text = f"{int(self.mask.sum())} of {self.mask.size} positions acquired"
        if facts.side_lobe > 1e-4:
            distance = " and ".join(f"{d:+d}" for d in facts.side_lobe_at).replace("-", "−")
            text += (
                f"; largest side lobe of the point spread {100 * facts.side_lobe:.1f} % of the "
                f"peak at {distance} voxels"
            )
        if facts.incoherent_peak is not None:
            text += f"; largest random part {100 * facts.incoherent_peak:.1f} %"
        return text + "."


def picture_of(
    pattern: Pattern,
    row_label: str,
    column_label: str,
    energy: NDArray[np.float64] | None = None,
) -> PatternPicture:
    """Picture of a pattern's first frame, with its echoes where it has an order of several."""
    first = pattern.mask[0] if pattern.frames else pattern.mask
    probability = pattern.probability
    if probability is not None and pattern.frames:
        probability = probability[0]
    echo = None
    if pattern.order is not None and pattern.order[:, 1].max(initial=0) > 0:
        echo = np.zeros(pattern.mask.shape, dtype=np.int64)
        echo[pattern.mask] = pattern.order[:, 1] + 1
        echo = echo[0] if pattern.frames else echo
    single = replace(pattern, mask=first, frames=0, probability=probability, order=None)
    return PatternPicture(single, row_label, column_label, echo, energy)


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


def pattern_figure(picture: PatternPicture) -> Any:
    """Figure of :func:`draw_pattern_picture`."""
    with figure_style():
        figure = new_figure(7.4 if picture.echo is None else 10.1, 2.5)
        draw_pattern_picture(figure, picture)
    return figure


def draw_pattern_picture(figure: Any, picture: PatternPicture) -> None:
    """Positions, echoes where they are known, density and point spread, side by side."""
    widths = (1, 1, 1.15) if picture.echo is None else (1, 1.15, 1, 1.15)
    axes = figure.subplots(1, len(widths), width_ratios=widths)
    _positions(axes[0], picture)
    if picture.echo is not None:
        _echoes(axes[1], picture, figure)
    _density(axes[-2], picture)
    if picture.one_dimensional:
        _spread_line(axes[-1], picture)
    else:
        _spread_plane(axes[-1], picture, figure)


def _positions(axes: Any, picture: PatternPicture) -> None:
    _show(axes, picture, picture.mask, cmap="gray", vmin=0, vmax=1)
    axes.set_title("acquired (white)")


def _echoes(axes: Any, picture: PatternPicture, figure: Any) -> None:
    assert picture.echo is not None
    shown = np.ma.masked_equal(picture.echo, 0)
    axes.set_facecolor("black")
    image = _show(axes, picture, shown, cmap="viridis", vmin=1, vmax=int(picture.echo.max()))
    figure.colorbar(image, ax=axes, shrink=0.9).set_label("echo of the train")
    axes.set_title("order")


def _show(axes: Any, picture: PatternPicture, values: Any, **look: Any) -> Any:
    """Values on the k-space grid, lines drawn along the readout."""
    if picture.one_dimensional:
        values = np.ma.repeat(values[:, None], max(8, values.size // 2), 1)
    rows, columns = values.shape
    edges = (-(columns // 2) - 0.5, columns - columns // 2 - 0.5)
    heights = (-(rows // 2) - 0.5, rows - rows // 2 - 0.5)
    extent = (*edges, *heights)
    image = axes.imshow(values, extent=extent, origin="lower", aspect="auto", **look)
    axes.spines[["top", "right"]].set_visible(True)
    axes.set_ylabel(f"{picture.row_label}, from centre")
    if picture.one_dimensional:
        axes.set_xticks([])
        axes.set_xlabel("readout, all samples")
    else:
        axes.set_xlabel(f"{picture.column_label}, from centre")
        axes.set_aspect("equal" if 0.4 < rows / columns < 2.5 else "auto")
    return image


def _density(axes: Any, picture: PatternPicture) -> None:
    where, share = radial_density(picture.mask)
    axes.step(where, 100 * share, where="mid", color=SERIES[0], lw=1.3, label="this draw")
    if picture.pattern.probability is not None:
        where, law = radial_density(picture.pattern.probability)
        axes.plot(where, 100 * law, color=INK, lw=1.0, ls="--", label="law")
        axes.legend(loc="best", fontsize=7, handlelength=1.5)
    axes.set_ylim(0, 105)
    axes.set_xlim(0, None)
    axes.set_title("density")
    axes.set_ylabel("positions acquired (%)")
    axes.set_xlabel("distance from centre (1 = edge)")
    axes.grid(axis="y")


def _spread_line(axes: Any, picture: PatternPicture) -> None:
    size = np.abs(picture.spread.psf)
    distance = np.arange(size.size) - size.size // 2
    axes.plot(distance, _decibel(size), color=SERIES[0], lw=0.8)
    if picture.spread.law_psf is not None:
        axes.plot(distance, _decibel(np.abs(picture.spread.law_psf)), color=INK, lw=0.9, ls="--")
    peak, at = picture.spread.side_lobe, picture.spread.side_lobe_at
    if peak > 1e-4:
        axes.plot([at[0]], _decibel(np.array([peak])), "v", color=SERIES[1], ms=6)
    axes.set_ylim(_FLOOR_DB, 3)
    axes.set_title("point spread")
    axes.set_ylabel("dB of the peak")
    axes.set_xlabel(f"voxels along {picture.row_label}")
    axes.grid(axis="y")


def _spread_plane(axes: Any, picture: PatternPicture, figure: Any) -> None:
    size = np.abs(picture.spread.psf)
    rows, columns = size.shape
    edges = (-(columns // 2) - 0.5, columns - columns // 2 - 0.5)
    heights = (-(rows // 2) - 0.5, rows - rows // 2 - 0.5)
    look = {"cmap": "cividis", "vmin": _FLOOR_DB, "vmax": 0, "origin": "lower"}
    shown = axes.imshow(_decibel(size), extent=(*edges, *heights), **look)
    axes.set_aspect("equal" if 0.4 < rows / columns < 2.5 else "auto")
    bar = figure.colorbar(shown, ax=axes, shrink=0.9)
    bar.set_label("dB of the peak")
    bar.outline.set_edgecolor(MUTED)
    peak, at = picture.spread.side_lobe, picture.spread.side_lobe_at
    axes.set_title("point spread")
    axes.set_ylabel(f"voxels along {picture.row_label}")
    axes.set_xlabel(f"voxels along {picture.column_label}")
    if peak > 1e-4:
        axes.plot([at[1]], [at[0]], "o", ms=8, mfc="none", mec="white", mew=1.0)


def _decibel(spread: NDArray[np.float64]) -> NDArray[np.float64]:
    return 20 * np.log10(np.maximum(spread, 10 ** (_FLOOR_DB / 20)))
