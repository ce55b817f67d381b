"""What the page shows of each arm: slices, windows, patterns."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.report.folder import StoredMap, StudyFolder
from mrics.report.image_figures import PanelRow, Window, error_factor, image_window
from mrics.report.pattern_figures import PatternPicture
from mrics.report.pictures import ScanPictures
from mrics.report.summary import charted_metrics, exact_arms, first_metric, limits_of, shown_slices
from mrics.report.words import MetricWords, metric_value, metric_words
from mrics.sampling import Pattern


@dataclass(frozen=True)
class ArmPictures:
    """Images of one arm: the scan and draw they come from, and the slices."""

    scan: ScanPictures
    draw: int
    rows: list[PanelRow]


@dataclass(frozen=True)
class ArmView:
    """Everything a page, a document or a figure file shows of one arm.

    Attributes
    ----------
    row : dict
        The arm's entry in results.json.
    pattern : PatternPicture or None
        None where no pattern of it is stored.
    pictures : ArmPictures or None
        None where no images of it are stored.
    window : Window or None
        Scale of the images.
    metrics : tuple of MetricWords
        Drawn by slice: those with limits first, three at most; empty without finished units and
        where the arm gives the reference back to rounding.
    """

    row: dict[str, Any]
    pattern: PatternPicture | None
    pictures: ArmPictures | None
    window: Window | None
    metrics: tuple[MetricWords, ...]

    @property
    def aspect(self) -> float:
        """Voxel height / width of the images."""
        assert self.pictures is not None
        view = self.pictures.scan.view
        return view.row_mm / view.column_mm


def arm_views(
    study: StudyFolder, pictures: list[ScanPictures], scales: dict[str, Window]
) -> list[ArmView]:
    """All arms in the order of the protocol."""
    limited = {limit.metric for limit in limits_of(study)}
    charted = charted_metrics(study)
    chosen = sorted(charted, key=lambda m: (m.key not in limited, charted.index(m)))[:3]
    metrics = tuple(sorted(chosen, key=charted.index))
    nothing_to_draw = exact_arms(study)
    views = []
    for arm in study.arms:
        shown = arm_pictures(study, arm, pictures)
        views.append(
            ArmView(
                arm,
                pattern_picture(study, arm),
                shown,
                scales[shown.scan.entry["id"]] if shown else None,
                metrics if study.units(arm["id"]) and arm["id"] not in nothing_to_draw else (),
            )
        )
    return views


def windows(study: StudyFolder, pictures: list[ScanPictures]) -> dict[str, Window]:
    """Image window of every scan, and one error scale for all from the worst slices."""
    grey = {}
    ratios = []
    for scan in pictures:
        identity = scan.entry["id"]
        grey[identity] = image_window(scan.reference, scan.body)
        width = grey[identity][1] - grey[identity][0]
        for one in scan.recovered:
            chosen = shown_slices(study, one.arm, identity, one.draw)
            at = scan.position(chosen["worst"]) if chosen else None
            if at is not None:
                error = np.abs(one.image[at] - scan.reference[at])
                inside = error[scan.body[at]]
                ratios.append(float(np.percentile(inside, 97)) / width if inside.size else 0.0)
    factor = error_factor(ratios)
    return {scan: Window(*ends, factor) for scan, ends in grey.items()}


def arm_pictures(
    study: StudyFolder, arm: dict[str, Any], pictures: list[ScanPictures]
) -> ArmPictures | None:
    """Worst and median slice of an arm, on the scan that holds its worst slice if that is stored.

    None where no recovered map of the arm is stored.
    """
    key = first_metric(study)
    where = ((arm.get("metrics") or {}).get(key) or {}).get("worst_where") or {}
    having = [scan for scan in pictures if scan.of_arm(arm["id"])]
    having.sort(key=lambda scan: scan.entry["id"] != where.get("scan"))
    if not having:
        return None
    scan = having[0]
    drawn = [one for one in scan.recovered if one.arm == arm["id"]]
    stack = next((one for one in drawn if one.draw == where.get("draw")), drawn[0])
    chosen = shown_slices(study, arm["id"], scan.entry["id"], stack.draw)
    words = metric_words(key)
    rows: list[PanelRow] = []
    for reason, row in chosen.items():
        at = scan.position(row)
        if at is None or (rows and row is chosen["worst"]):
            continue
        truth, image = scan.reference[at], stack.image[at]
        title = f"slice {row['index']}, {reason}\n{words.label} {metric_value(key, row[key])}"
        rows.append(PanelRow(title, truth, image, image - truth))
    return ArmPictures(scan, stack.draw, rows) if rows else None


def pattern_picture(study: StudyFolder, arm: dict[str, Any]) -> PatternPicture | None:
    """Stored pattern of an arm (first frame where frames differ), None where it is not stored.

    The stored maps have the phase axis first, then the partition axis, then frames.
    """
    stored = study.find("pattern", "", arm["id"])
    if stored is None:
        return None
    mask = _one_frame(stored)
    echoes = study.find("order", "", arm["id"])
    grid = (study.results["protocol"].get("values") or {}).get("grid") or {}
    return PatternPicture(
        Pattern(mask > 0),
        axis_name("phase", grid),
        axis_name("partition", grid),
        _one_frame(echoes) if echoes else None,
    )


def _one_frame(stored: StoredMap) -> NDArray[np.int64]:
    """A map on the phase-encode grid, first frame, without its axes of length 1."""
    values = np.asarray(stored.load()[0])
    values = values[..., 0] if values.ndim == 4 else values
    return values.reshape([n for n in values.shape if n > 1] or [1]).astype(np.int64)


def axis_name(role: str, grid: dict[str, Any]) -> str:
    """The role with its letter where the protocol names the axis ("phase (j)")."""
    letter = grid.get(f"{role}_axis")
    return f"{role} ({letter})" if letter else role
