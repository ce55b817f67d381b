"""Single figures for slides and papers: PNG at 300 dpi and SVG."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

from mrics.caution import RESEARCH_ONLY
from mrics.errors import ReportError
from mrics.report.arms import arm_views, windows
from mrics.report.charts import against_acceleration, by_slice
from mrics.report.dictionary_figures import dictionary_figure, dictionary_picture
from mrics.report.folder import StudyFolder, open_folder
from mrics.report.image_figures import panel_figure
from mrics.report.panels import panels
from mrics.report.pattern_figures import pattern_figure
from mrics.report.pictures import load_pictures
from mrics.report.style_figures import figure_style
from mrics.report.summary import charted_metrics

_DPI = 300


def write_figures(directory: str | Path) -> tuple[Path, ...]:
    """Write every figure of a study's report into ``DIR/figures``.

    Parameters
    ----------
    directory : str or Path
        Folder with results.json and the maps it names.

    Returns
    -------
    tuple of Path
        ``metrics``, one for each further panel (``features``, ``spectral``, ...), and for each
        arm ``ARM-pattern``, ``ARM-images`` and ``ARM-slices``.

    Raises
    ------
    ReportError
        As :func:`mrics.report.write_report` raises.
    """
    study = open_folder(directory)
    folder = study.directory / "figures"
    written = []
    try:
        folder.mkdir(exist_ok=True)
        for name, figure in _figures(study):
            _caution_below(figure)
            for ending, look in ((".png", {"dpi": _DPI}), (".svg", {"metadata": {"Date": None}})):
                path = folder / f"{name}{ending}"
                with figure_style():
                    figure.savefig(path, bbox_inches="tight", **look)
                written.append(path)
    except OSError as problem:
        raise ReportError(
            f"Figures cannot be written ({problem.strerror}).",
            str(folder),
            "Give a folder that may be written to, with room on the disk.",
        ) from problem
    return tuple(written)


def _caution_below(figure: Any) -> None:
    """The caution under everything that is drawn, which may reach below the sheet."""
    with figure_style():
        figure.canvas.draw()
        lowest = figure.get_tightbbox().y0
        height = (lowest - 0.06) / figure.get_figheight()
        figure.text(0.0, height, RESEARCH_ONLY, fontsize=6, va="top")


def _figures(study: StudyFolder) -> Iterator[tuple[str, Any]]:
    pictures = load_pictures(study)
    charted = charted_metrics(study)
    if charted:
        yield "metrics", against_acceleration(study, charted)
    for panel in panels(study):
        yield panel.name, panel.figure()
    for view in arm_views(study, pictures, windows(study, pictures)):
        name = "".join(c if c.isalnum() or c in "-." else "-" for c in str(view.row["id"]))
        if view.pattern is not None:
            yield f"{name}-pattern", pattern_figure(view.pattern)
        if view.pictures is not None and view.window is not None:
            shown = view.pictures
            ends = shown.scan.view.ends
            yield f"{name}-images", panel_figure(shown.rows, view.window, view.aspect, ends)
        dictionary = dictionary_picture(study, view)
        if dictionary is not None:
            yield f"{name}-dictionary", dictionary_figure(dictionary)
        if view.metrics:
            yield f"{name}-slices", by_slice(study, view.row, view.metrics)
