"""report.html: one self-contained page, drawn from results.json and the stored maps alone."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from mrics.report.arms import ArmPictures, ArmView, arm_views, windows
from mrics.report.charts import against_acceleration, by_slice
from mrics.report.dictionary_figures import dictionary_figure, dictionary_picture
from mrics.report.folder import StudyFolder, open_folder
from mrics.report.image_figures import Window, panel_figure
from mrics.report.panels import panels
from mrics.report.pattern_figures import pattern_figure
from mrics.report.pictures import load_pictures
from mrics.report.rendering import render, write_page
from mrics.report.style_figures import svg_uri
from mrics.report.summary import (
    charted_metrics,
    exact_arms,
    first_metric,
    limits_of,
    metrics_of,
    range_marks,
    unfinished,
    unreached,
    worst_slices,
)
from mrics.report.viewer_data import viewer_values
from mrics.report.words import metric_value, metric_words, number

PAGE_LIMIT = 24_000_000
"""Characters a page may have; images get what figures and tables leave."""


def write_report(directory: str | Path) -> Path:
    """Draw ``report.html`` of a study folder again.

    Parameters
    ----------
    directory : str or Path
        Folder with results.json and the maps it names. Scans are not read.

    Returns
    -------
    Path
        The page that was written.

    Raises
    ------
    ReportError
        For a folder without results, results of a newer version, damaged maps, or a folder that
        cannot be written to. Maps that are gone and units that never ran are named in the page.
    """
    study = open_folder(directory)
    return write_page(study.directory / "report.html", render("report.html", **page_values(study)))


def page_values(study: StudyFolder) -> dict[str, Any]:
    """Everything the template shows."""
    metrics = metrics_of(study)
    pictures = load_pictures(study)
    scales = windows(study, pictures)
    charted = charted_metrics(study)
    today = next((a for a in study.arms if a.get("today")), None)
    arms = [_arm(study, view) for view in arm_views(study, pictures, scales)]
    drawn = sum(len(v) for arm in arms for v in arm.values() if isinstance(v, str))
    room = max(PAGE_LIMIT // 4, PAGE_LIMIT - drawn)
    return {
        "study": study.results,
        "about": study.results["protocol"],
        "verdict": study.results.get("verdict") or {},
        "arms": arms,
        "today": today,
        "scan_names": {s["id"]: s.get("name") or s["id"] for s in study.scans},
        "full_times": _full_times(study),
        "metrics": metrics,
        "charted": charted,
        "marks": {m.key: range_marks(study, m) for m in metrics},
        "limits": limits_of(study),
        "viewer": viewer_values(study, pictures, scales, room),
        "first_metric": metric_words(first_metric(study)),
        "chart": svg_uri(against_acceleration(study, charted)) if charted else None,
        "chart_text": _chart_text(study, charted),
        "further": [(panel, svg_uri(panel.figure())) for panel in panels(study)],
        "missing_maps": study.missing,
        "not_finite": {name: n for scan in pictures for name, n in scan.not_finite.items()},
        "units_done": sum(1 for u in study.results["units"] if u.get("slices")),
        "units_planned": study.results.get("units_planned"),
        "unfinished": unfinished(study),
        "unreached": unreached(study),
        "provenance": study.results.get("provenance") or {},
        "timing": study.results.get("timing") or {},
    }


def _arm(study: StudyFolder, view: ArmView) -> dict[str, Any]:
    """One arm with its pictures as data URIs."""
    out: dict[str, Any] = {"row": view.row, "units": study.units(view.row["id"])}
    out["pattern"] = out["images"] = out["by_slice"] = None
    if view.pattern is not None:
        out["pattern"] = svg_uri(pattern_figure(view.pattern))
        out["pattern_text"] = view.pattern.sentence
    shown, window = view.pictures, view.window
    out["pictures"], out["window"] = shown, window
    if shown is not None and window is not None:
        figure = panel_figure(shown.rows, window, view.aspect, shown.scan.view.ends)
        out["images"] = svg_uri(figure)
        out["images_text"] = _images_text(view.row, shown, window)
    out["dictionary"] = None
    dictionary = dictionary_picture(study, view)
    if dictionary is not None:
        out["dictionary"] = svg_uri(dictionary_figure(dictionary))
        out["dictionary_text"] = dictionary.text
    out["worst"] = worst_slices(study, view.row["id"])
    out["exact"] = view.row["id"] in exact_arms(study)
    if view.metrics:
        out["by_slice"] = svg_uri(by_slice(study, view.row, view.metrics))
        out["by_slice_text"] = (
            f"{', '.join(m.label for m in view.metrics)} of {view.row['label']} by slice, "
            "mean and range over draws, one curve for each scan."
        )
    return out


def _full_times(study: StudyFolder) -> list[float]:
    """Times of the full scan that the arms are held against, each once."""
    times = [arm.get("full_scan_time_s") for arm in study.arms]
    return sorted({float(time) for time in times if time is not None})


def _images_text(arm: dict[str, Any], shown: ArmPictures, window: Window) -> str:
    slices = "; ".join(r.title.replace("\n", ", ") for r in shown.rows)
    return (
        f"Reference, recovered and error images of {arm['label']}, scan "
        f"{shown.scan.entry['name']}: {slices}. Window {number(window.low)} to "
        f"{number(window.high)}, error scale ±{number(window.error_end)}."
    )


def _chart_text(study: StudyFolder, metrics: Any) -> str:
    """What the chart says, in words, for a reader who cannot see it."""
    parts = []
    for metric in metrics:
        values = [
            f"{a['label']} {metric_value(metric.key, a['metrics'][metric.key]['mean'])}"
            for a in study.arms
            if metric.key in (a.get("metrics") or {})
        ]
        parts.append(f"{metric.label}: {', '.join(values)}")
    return "Metrics against acceleration. " + ". ".join(parts) + "."
