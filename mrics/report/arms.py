"""What the page shows of each arm: slices, windows, patterns."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from mrics.report.folder import StudyFolder
from mrics.report.image_figures import PanelRow, Window, error_factor, image_window
from mrics.report.pattern_figures import PatternPicture
from mrics.report.summary import first_metric, shown_slices
from mrics.report.words import metric_value, metric_words
from mrics.scan.volume import LETTERS


@dataclass(frozen=True)
class ArmPictures:
    """Images of one arm: the scan and draw they come from, and the slices."""

    scan: dict[str, Any]
    draw: int | None
    rows: list[PanelRow]


def windows(study: StudyFolder) -> dict[str, Window]:
    """Image window of every scan and one error scale for all, from the slices that are shown."""
    grey: dict[str, tuple[float, float]] = {}
    ratios = []
    for scan in study.scans:
        reference = study.find("reference", scan["id"])
        if reference is None:
            continue
        indices = studied(scan)
        body = study.find("body", scan["id"])
        mask = study.planes(body, indices) > 0 if body else None
        grey[scan["id"]] = image_window(np.abs(study.planes(reference, indices)), mask)
        width = grey[scan["id"]][1] - grey[scan["id"]][0]
        for arm in study.arms:
            stored = study.find("error", scan["id"], arm["id"])
            chosen = shown_slices(study, arm["id"], scan["id"], stored.draw) if stored else {}
            if stored and chosen:
                index = int(chosen["worst"]["index"])
                error = np.abs(study.planes(stored, [index])[0])
                inside = error if mask is None else error[mask[indices.index(index)]]
                ratios.append(float(np.percentile(inside, 97)) / width if inside.size else 0.0)
    factor = error_factor(ratios)
    return {scan: Window(*ends, factor) for scan, ends in grey.items()}


def studied(scan: dict[str, Any]) -> list[int]:
    """Plane numbers of a scan that were studied."""
    axis = LETTERS.index(scan["plane_axis"])
    return [int(i) for i in scan.get("planes") or range(scan["shape"][axis])]


def arm_pictures(study: StudyFolder, arm: dict[str, Any]) -> ArmPictures | None:
    """Worst and median slice of an arm, on the scan that holds its worst slice if that is stored.

    None where no recovered map of the arm is stored.
    """
    key = first_metric(study)
    where = ((arm.get("metrics") or {}).get(key) or {}).get("worst_where") or {}
    recovered = study.find("recovered", where.get("scan", ""), arm["id"], where.get("draw"))
    recovered = recovered or study.find("recovered", where.get("scan", ""), arm["id"])
    recovered = recovered or study.find("recovered", "", arm["id"])
    if recovered is None:
        return None
    scan = study.scan(recovered.scan)
    reference = study.find("reference", scan["id"])
    chosen = shown_slices(study, arm["id"], scan["id"], recovered.draw)
    if reference is None or not chosen:
        return None
    words = metric_words(key)
    rows: list[PanelRow] = []
    for reason in dict.fromkeys(("worst", "median")):
        row = chosen[reason]
        if rows and row is chosen["worst"]:
            continue
        index, frame = int(row["index"]), int(row.get("frame") or 0)
        truth = np.abs(study.planes(reference, [index], frame)[0])
        image = np.abs(study.planes(recovered, [index], frame)[0])
        title = f"slice {index}, {reason}\n{words.label} {metric_value(key, row[key])}"
        rows.append(PanelRow(title, truth, image, image - truth))
    return ArmPictures(scan, recovered.draw, rows)


def pattern_picture(study: StudyFolder, arm: dict[str, Any]) -> PatternPicture | None:
    """Stored pattern of an arm (first frame where frames differ), None where it is not stored.

    The stored mask has the phase axis first, then the partition axis, then frames.
    """
    stored = study.find("pattern", "", arm["id"])
    if stored is None:
        return None
    mask = np.asarray(stored.load()[0]) > 0
    mask = mask[..., 0] if mask.ndim == 4 else mask
    mask = mask.reshape([n for n in mask.shape if n > 1] or [1])
    grid = (study.results["protocol"].get("values") or {}).get("grid") or {}
    return PatternPicture(mask, axis_name("phase", grid), axis_name("partition", grid))


def axis_name(role: str, grid: dict[str, Any]) -> str:
    """The role with its letter where the protocol names the axis ("phase (j)")."""
    letter = grid.get(f"{role}_axis")
    return f"{role} ({letter})" if letter else role
