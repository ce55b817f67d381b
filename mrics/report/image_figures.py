"""Reference, recovered and error side by side at one window."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.report.colours import MUTED, signed_map
from mrics.report.style_figures import figure_style, new_figure
from mrics.report.words import number

# Larger than elsewhere: on paper these figures are drawn smaller than others.
_FONT = 10.0
_FACTORS = (1, 2, 5, 10, 20, 50, 100)


@dataclass(frozen=True)
class Window:
    """The one image window of a scan and the one error scale of a study.

    Attributes
    ----------
    low, high : float
        Values shown black and white.
    factor : int
        The error runs from -(high - low)/factor to +(high - low)/factor.
    """

    low: float
    high: float
    factor: int

    @property
    def error_end(self) -> float:
        """Largest error shown in full colour."""
        return (self.high - self.low) / self.factor


@dataclass(frozen=True)
class PanelRow:
    """Three images of one slice.

    Attributes
    ----------
    title : str
        What slice it is and why it is shown.
    reference, recovered, error : ndarray of shape (rows, columns), real
        Magnitudes, and recovered - reference.
    """

    title: str
    reference: NDArray[Any]
    recovered: NDArray[Any]
    error: NDArray[Any]


def image_window(reference: NDArray[Any], body: NDArray[np.bool_] | None) -> tuple[float, float]:
    """Window of a scan: 0 to the 99.5th percentile of the body, so that few voxels saturate."""
    values = reference[body] if body is not None and body.any() else reference
    high = float(np.percentile(values, 99.5)) if values.size else 1.0
    return 0.0, high if high > 0 else 1.0


def error_factor(ratios: list[float]) -> int:
    """The largest factor of 1, 2, 5, 10, ... that keeps the errors of three arms in four in range.

    Parameters
    ----------
    ratios : list of float
        97th percentile of |error| in the body / window width, one per arm and scan; exact
        recoveries (0) do not count.
    """
    counted = [r for r in ratios if r > 1e-6]
    typical = float(np.percentile(counted, 75)) if counted else 1.0
    fitting = [f for f in _FACTORS if typical * f <= 1.0]
    return fitting[-1] if fitting else 1


def panel_figure(
    rows: list[PanelRow], window: Window, aspect: float, ends: tuple[str, str, str, str]
) -> Any:
    """Figure of :func:`draw_panels`."""
    shape = rows[0].reference.shape
    panel = min(1.85 * shape[0] * aspect / shape[1], 2.5)
    with figure_style():
        figure = new_figure(7.2, len(rows) * (panel + 0.1) + 0.9)
        draw_panels(figure, rows, window, aspect, ends)
    return figure


def draw_panels(
    figure: Any,
    rows: list[PanelRow],
    window: Window,
    aspect: float,
    ends: tuple[str, str, str, str],
) -> None:
    """Rows of reference | recovered | error with their two scales.

    Parameters
    ----------
    figure : Figure or SubFigure
        Where to draw.
    rows : list of PanelRow
        Slices to show.
    window : Window
        Common window and error scale.
    aspect : float
        Voxel height / voxel width.
    ends : tuple of str
        What lies left, right, top and bottom of an image.
    """
    grid = figure.subplots(len(rows), 3, squeeze=False)
    for axes, row in zip(grid, rows, strict=True):
        grey = _row(axes, row, window, aspect)
        _end_letters(axes[0], ends)
    for axes, name in zip(grid[0], ("reference", "recovered", "error"), strict=True):
        text = name if name != "error" else f"error ×{window.factor}"
        axes.set_title(text, fontsize=_FONT)
    scale = {"orientation": "horizontal", "shrink": 0.75, "aspect": 30, "pad": 0.02}
    bar = figure.colorbar(grey[0], ax=grid[:, :2].ravel().tolist(), **scale)
    bar.set_label("image value (common window)", fontsize=_FONT)
    error_bar = figure.colorbar(grey[1], ax=grid[:, 2].tolist(), **scale)
    error_bar.set_label("recovered − reference", fontsize=_FONT)
    error_bar.set_ticks([-window.error_end, 0, window.error_end])
    error_bar.set_ticklabels([f"−{number(window.error_end)}", "0", number(window.error_end)])
    for each in (bar, error_bar):
        each.ax.tick_params(labelsize=_FONT)
        each.outline.set_edgecolor(MUTED)


def _row(axes: Any, row: PanelRow, window: Window, aspect: float) -> tuple[Any, Any]:
    grey = {"cmap": "gray", "vmin": window.low, "vmax": window.high, "aspect": aspect}
    shown = axes[0].imshow(row.reference, **grey)
    axes[1].imshow(row.recovered, **grey)
    end = window.error_end
    error = axes[2].imshow(row.error, cmap=signed_map(), vmin=-end, vmax=end, aspect=aspect)
    axes[0].set_ylabel(row.title, fontsize=_FONT, rotation=0, ha="right", va="center", labelpad=6)
    for one in axes:
        one.set_xticks([])
        one.set_yticks([])
        for spine in one.spines.values():
            spine.set_visible(True)
            spine.set_color(MUTED)
    return shown, error


def _end_letters(axes: Any, ends: tuple[str, str, str, str]) -> None:
    """Anatomical letters at the edges of a panel, outlined so that they read on any grey."""
    from matplotlib.patheffects import withStroke

    places = (
        (0.02, 0.5, "left", "center"),
        (0.98, 0.5, "right", "center"),
        (0.5, 0.98, "center", "top"),
        (0.5, 0.02, "center", "bottom"),
    )
    for letter, (x, y, across, up) in zip(ends, places, strict=True):
        axes.text(
            x,
            y,
            letter,
            transform=axes.transAxes,
            ha=across,
            va=up,
            fontsize=_FONT,
            color="white",
            path_effects=[withStroke(linewidth=2, foreground="black")],
        )
