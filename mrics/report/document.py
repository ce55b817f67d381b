"""The printable document: vector charts and selectable text on A4, by matplotlib alone."""

from __future__ import annotations

import textwrap
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import partial
from itertools import pairwise
from pathlib import Path
from typing import Any

from mrics.caution import RESEARCH_ONLY
from mrics.errors import ReportError
from mrics.report.arms import ArmView, arm_views, windows
from mrics.report.charts import draw_against_acceleration, draw_by_slice
from mrics.report.colours import FAIL, INK, MUTED
from mrics.report.dictionary_figures import (
    DictionaryPicture,
    dictionary_picture,
    draw_dictionary,
)
from mrics.report.folder import StudyFolder, open_folder
from mrics.report.image_figures import draw_panels
from mrics.report.panels import Panel, panels
from mrics.report.pattern_figures import draw_pattern_picture
from mrics.report.pictures import load_pictures
from mrics.report.style_figures import figure_style
from mrics.report.summary import charted_metrics, limits_of, metrics_of, unfinished, unreached
from mrics.report.words import clock, metric_value, number, settings_text

_WIDTH, _HEIGHT = 8.27, 11.69
_LEFT, _RIGHT, _TOP, _BOTTOM = 0.085, 0.915, 0.945, 0.06
_LINE = 0.0148
_COLUMNS = 104
_SHORT = {"feature_retention": "retained"}


@dataclass(frozen=True)
class Line:
    """One line of running text."""

    text: str
    size: float = 9.0
    weight: str = "normal"
    colour: str = INK
    family: str = "sans-serif"


def write_document(directory: str | Path) -> Path:
    """Write ``report.pdf`` of a study folder.

    Front page with question, answer and verdict table; what weakens the answer; metrics against
    acceleration; one page for each arm; definitions, provenance and protocol.

    Parameters
    ----------
    directory : str or Path
        Folder with results.json and the maps it names.

    Raises
    ------
    ReportError
        As :func:`mrics.report.write_report` raises.
    """
    from matplotlib.backends.backend_pdf import PdfPages

    study = open_folder(directory)
    path = study.directory / "report.pdf"
    temporary = path.with_name(".report.pdf.tmp")
    title = study.results["protocol"].get("title") or "Undersampling study"
    facts: Any = {"Title": title, "Creator": "mrics", "Producer": "mrics", "CreationDate": None}
    try:
        with figure_style(), PdfPages(temporary, metadata=facts) as pages:
            for number_, draw in enumerate(_pages(study), start=1):
                pages.savefig(_page(draw, title, number_))
        temporary.replace(path)
    except OSError as problem:
        temporary.unlink(missing_ok=True)
        raise ReportError(
            f"report.pdf cannot be written ({problem.strerror}).",
            str(study.directory),
            "Give a folder that may be written to, with room on the disk.",
        ) from problem
    return path


def _page(draw: Callable[[Any], None], title: str, place: int) -> Any:
    """One A4 page with caution above and below, running title and page number."""
    from matplotlib.backends.backend_pdf import FigureCanvasPdf
    from matplotlib.figure import Figure

    figure = Figure(figsize=(_WIDTH, _HEIGHT))
    FigureCanvasPdf(figure)
    small: Any = {"fontsize": 7.5, "color": MUTED, "va": "center"}
    figure.text(0.5, 0.978, RESEARCH_ONLY, ha="center", **small)
    figure.text(0.5, 0.022, RESEARCH_ONLY, ha="center", **small)
    figure.text(_LEFT, 0.038, textwrap.shorten(title, 80, placeholder="…"), ha="left", **small)
    figure.text(_RIGHT, 0.038, str(place), ha="right", **small)
    draw(figure)
    return figure


def _pages(study: StudyFolder) -> Iterator[Callable[[Any], None]]:
    pictures = load_pictures(study)
    yield from _front(study)
    charted = charted_metrics(study)
    if charted:
        yield partial(_chart_page, study=study, metrics=charted)
    for together in _filled(panels(study)):
        yield partial(_panel_page, together=together)
    for view in arm_views(study, pictures, windows(study, pictures)):
        yield partial(_arm_page, study=study, view=view)
        dictionary = dictionary_picture(study, view)
        if dictionary is not None:
            yield partial(_dictionary_page, row=view.row, picture=dictionary)
    yield from _text_pages(list(_appendix(study)))


def _front(study: StudyFolder) -> Iterator[Callable[[Any], None]]:
    """Question, answer and verdict table, then what weakens the answer on the same pages."""
    about = study.results["protocol"]
    verdict = study.results.get("verdict") or {}
    status = str(verdict.get("status") or "undecided").capitalize()
    head = [
        *_wrapped(about.get("title") or "Undersampling study", 46, size=18.0, weight="bold"),
        *_wrapped(about.get("question") or "", 82, size=11.0, colour=MUTED),
        Line(""),
        *_wrapped(f"{status}: {verdict.get('sentence', '')}", 66, size=13.0, weight="bold"),
        Line(""),
    ]
    rows = [*_table(study)]
    lines = [*head, *rows, Line(""), *_doubts(study)]
    yield from _text_pages(lines)


def _table(study: StudyFolder) -> Iterator[Line]:
    """The verdict table in fixed-width lines, so that its text can be selected."""
    metrics = charted_metrics(study)[:4]
    labels = [str(a["label"]) + (" *" if a.get("today") else "") for a in study.arms]
    width = min(34, max((len(x) for x in labels), default=10))
    head = f"{'arm':<{width}} {'R':>5} {'time':>6} {'saved':>6}"
    head += "".join(f" {_SHORT.get(m.key, m.label[:8].strip()):>8}" for m in metrics) + "  verdict"
    mono: Any = {"size": 8.0, "family": "monospace"}
    yield Line(head, weight="bold", **mono)
    for arm, label in zip(study.arms, labels, strict=True):
        time, full = arm.get("scan_time_s"), arm.get("full_scan_time_s")
        saved = None if time is None or full is None else full - time
        text = f"{textwrap.shorten(label, width, placeholder='…'):<{width}} "
        text += f"{number(arm.get('acceleration')):>5} {clock(time):>6} {clock(saved):>6}"
        for metric in metrics:
            value = (arm.get("metrics") or {}).get(metric.key) or {}
            text += f" {metric_value(metric.key, value.get('mean')):>8}"
        verdict = arm.get("verdict") or {}
        status = str(verdict.get("status") or "undecided")
        yield Line(f"{text}  {status}", colour=FAIL if status == "fail" else INK, **mono)
        for limit in verdict.get("limits") or []:
            if limit["status"].startswith("pass") or limit["value"] is None:
                continue
            reached = metric_value(limit.get("metric") or "", limit["value"])
            asked = metric_value(limit.get("metric") or "", limit["limit"])
            missed = f"missed by {number(abs(limit['margin']), 2)}"
            said = missed if limit["status"] == "fail" else "undecided"
            text = f"{'':<{width}} {limit['key']} {asked}: {reached}, {said}"
            yield Line(text, colour=MUTED, **mono)
    if any(a.get("today") for a in study.arms):
        yield Line("* in use today; saved: against the fully sampled scan", 8.0, colour=MUTED)
    notes = dict.fromkeys((a.get("verdict") or {}).get("confidence") for a in study.arms)
    for note in notes:
        yield from _wrapped(note or "", 112, size=8.0, colour=MUTED)


def _doubts(study: StudyFolder) -> Iterator[Line]:
    yield Line("What weakens this answer", 11.0, "bold")
    for scan in study.scans:
        name = scan.get("name") or scan["id"]
        for finding in scan.get("findings") or []:
            text = f"{name}: {finding['what']} ({finding['where']}); {finding['bias']}. "
            yield from _wrapped(f"{text}{finding['advice']}.", _COLUMNS)
    for row in unreached(study):
        yield from _wrapped(f"{row['label']}: {'; '.join(row['told'])}.", _COLUMNS)
    for arm_label, scan_name in unfinished(study):
        yield from _wrapped(f"Not finished: {arm_label} on {scan_name}.", _COLUMNS)
    for note in study.results.get("notes") or []:
        yield from _wrapped(str(note), _COLUMNS)
    for name in study.missing:
        yield from _wrapped(f"Stored map that is gone: {name}.", _COLUMNS)


def _chart_page(figure: Any, study: StudyFolder, metrics: Any) -> None:
    figure.text(_LEFT, _TOP, "What acceleration costs", fontsize=13, weight="bold", va="top")
    rows = -(-len(metrics) // 2)
    height = min(0.84, 0.2 * rows + 0.08)
    (area,) = _bands(figure, 0.91, 0.91 - height)
    draw_against_acceleration(area, study, metrics)


def _filled(every: list[Panel]) -> Iterator[list[Panel]]:
    """Panels that share a page."""
    together: list[Panel] = []
    for panel in every:
        if together and sum(_share(one) for one in [*together, panel]) > _TOP - _BOTTOM:
            yield together
            together = []
        together.append(panel)
    if together:
        yield together


def _share(panel: Panel) -> float:
    """Height of a panel with its heading, of the page's."""
    scale = (_RIGHT - _LEFT) * _WIDTH / panel.size_in[0]
    return min(_TOP - _BOTTOM, scale * panel.size_in[1] / _HEIGHT + 0.05)


def _panel_page(figure: Any, together: list[Panel]) -> None:
    edges, height = [], _TOP
    for panel in together:
        figure.text(_LEFT, height, panel.title, fontsize=13, weight="bold", va="top")
        edges += [height - 0.028, height - _share(panel) + 0.01]
        height -= _share(panel)
    for area, panel in zip(_bands(figure, *edges), together, strict=True):
        panel.draw(area)


def _arm_page(figure: Any, study: StudyFolder, view: ArmView) -> None:
    row = view.row
    status = str((row.get("verdict") or {}).get("status") or "undecided")
    today = ", in use today" if row.get("today") else ""
    heading = f"{textwrap.shorten(str(row['label']), 60, placeholder='…')}{today}: {status}"
    figure.text(_LEFT, _TOP, heading, fontsize=12, weight="bold", va="top")
    facts = (
        f"R {number(row.get('acceleration'))}, time {clock(row.get('scan_time_s'))} of "
        f"{clock(row.get('full_scan_time_s'))}. Sampling: {row.get('sampling')} "
        f"({settings_text(row.get('sampling_settings'))}). Recovery: {row.get('recovery')} "
        f"{settings_text(row.get('recovery_settings'))}"
    )
    text = "\n".join(textwrap.wrap(facts, 118)[:3])
    figure.text(_LEFT, 0.922, text, fontsize=8, color=MUTED, va="top")
    pattern, images, slices = _bands(figure, 0.885, 0.7, 0.69, 0.3, 0.27, 0.06)
    if view.pattern is not None:
        draw_pattern_picture(pattern, view.pattern)
    if view.pictures is not None and view.window is not None:
        shown = view.pictures
        draw_panels(images, shown.rows, view.window, view.aspect, shown.scan.view.ends)
        name = shown.scan.entry.get("name") or shown.scan.entry["id"]
        text = (
            f"{name}, draw {shown.draw}; one window for reference and recovered, error "
            f"×{view.window.factor}: full colour at ±{number(view.window.error_end)}"
        )
        figure.text(_LEFT, 0.295, text, fontsize=8, color=MUTED, va="top")
    else:
        figure.text(_LEFT, 0.5, "No images of this arm are stored.", fontsize=9)
    if view.metrics:
        draw_by_slice(slices, study, row, view.metrics)


def _dictionary_page(figure: Any, row: dict[str, Any], picture: DictionaryPicture) -> None:
    heading = f"{textwrap.shorten(str(row['label']), 60, placeholder='…')}: dictionary"
    figure.text(_LEFT, _TOP, heading, fontsize=12, weight="bold", va="top")
    figure.text(
        _LEFT, 0.922, "\n".join(textwrap.wrap(picture.text, 118)), fontsize=8, color=MUTED, va="top"
    )
    (band,) = _bands(figure, 0.8, 0.35)
    draw_dictionary(band, picture)


def _bands(figure: Any, *edges: float) -> list[Any]:
    """Bands of a page between falling heights, inside the side margins, every second one empty."""
    heights = [high - low for high, low in pairwise((1.0, *edges, 0.0))]
    figure.set_layout_engine("constrained", w_pad=0.03, h_pad=0.03)
    sides = (_LEFT, _RIGHT - _LEFT, 1 - _RIGHT)
    look: Any = {"height_ratios": heights, "width_ratios": sides, "wspace": 0, "hspace": 0}
    return list(figure.subfigures(len(heights), 3, squeeze=False, **look)[1::2, 1])


def _appendix(study: StudyFolder) -> Iterator[Line]:
    yield Line("What the numbers mean", 13.0, "bold")
    for metric in metrics_of(study):
        yield Line(metric.label, weight="bold")
        yield from _wrapped(f"{metric.plain} {metric.definition}.", _COLUMNS)
    yield from _wrapped(
        "R: positions of the full rectangular phase-encode grid / acquired positions, calibration "
        "included. Mean: over scans, of the mean over draws, of the mean over slices.",
        _COLUMNS,
    )
    for limit in limits_of(study):
        sign = "at least" if limit.at_least else "at most"
        yield Line(f"Limit {limit.key}: {sign} {metric_value(limit.metric, limit.value)}.")
    yield Line("")
    yield Line("Where this comes from", 13.0, "bold")
    yield Line(f"mrics {study.results['mrics']}")
    for scan in study.scans:
        shape = " × ".join(str(n) for n in scan["shape"])
        yield from _wrapped(
            f"{scan.get('name') or scan['id']}: {shape}, {scan['complex_source']}, SHA-256 "
            f"{scan['sha256']}",
            _COLUMNS,
        )
    for key, value in (study.results.get("provenance") or {}).items():
        shown = settings_text(value) if isinstance(value, dict) else value
        yield from _wrapped(f"{key.replace('_', ' ')}: {shown}", _COLUMNS)
    yield Line("")
    yield Line("Protocol as it was run", 11.0, "bold")
    for text in str(study.results["protocol"].get("text") or "").splitlines():
        for part in textwrap.wrap(text, 110, replace_whitespace=False) or [""]:
            yield Line(part, 7.6, family="monospace")


def _wrapped(text: str, columns: int, **look: Any) -> list[Line]:
    return [Line(part, **look) for part in textwrap.wrap(str(text), columns)]


def _text_pages(lines: list[Line]) -> Iterator[Callable[[Any], None]]:
    """Lines as pages, each filled to the bottom margin."""
    page: list[tuple[float, Line]] = []
    height = _TOP
    for line in lines:
        step = _LINE * max(line.size, 7.0) / 9.0
        if height - step < _BOTTOM and page:
            yield partial(_write, page=page)
            page, height = [], _TOP
        page.append((height, line))
        height -= step
    if page:
        yield partial(_write, page=page)


def _write(figure: Any, page: list[tuple[float, Line]]) -> None:
    for height, line in page:
        look: Any = {"fontsize": line.size, "weight": line.weight, "color": line.colour}
        figure.text(_LEFT, height, line.text, va="top", family=line.family, **look)
