"""Charts of measures beyond the scores, as one kind of thing for page, document and figure files.

A panel is one file with a function ``panel(study) -> Panel | None`` and one line in ``_HOMES``.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from importlib import import_module
from typing import Any

from mrics.report.folder import StudyFolder
from mrics.report.style_figures import figure_style, new_figure

_HOMES = (
    "mrics.report.feature_chart",
    "mrics.report.region_chart",
    "mrics.report.spectral_chart",
    "mrics.report.sensitivity_panel",
    "mrics.report.singular_chart",
    "mrics.report.noise_gain_panel",
)


@dataclass(frozen=True)
class Panel:
    """One chart with the numbers behind it.

    Attributes
    ----------
    name : str
        Stem of its figure files.
    title : str
        Heading.
    text : str
        What it shows, in words: caption and text for a reader who cannot see it.
    size_in : tuple of float
        Width and height in inches that it needs.
    draw : callable of figure
        Draws into a matplotlib Figure or SubFigure.
    head : tuple of str
        Columns of the table; the first one names the row.
    rows : list of tuple of str
        The numbers, written out.
    lines : bool
        Drawn in lines alone, so that a dark page may invert it.
    """

    name: str
    title: str
    text: str
    size_in: tuple[float, float]
    draw: Callable[[Any], None]
    head: tuple[str, ...]
    rows: list[tuple[str, ...]]
    lines: bool = False

    def figure(self) -> Any:
        """The chart on a sheet of its own."""
        with figure_style():
            figure = new_figure(*self.size_in)
            self.draw(figure)
        return figure


def panels(study: StudyFolder) -> list[Panel]:
    """Panels whose measures the study has, in the order of the page."""
    made = (import_module(home).panel(study) for home in _HOMES)
    return [panel for panel in made if panel is not None]
