"""Small features that a study inserted: where they lie on the page, and what they change there."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.quality.features import Feature
from mrics.report.folder import StoredMap, StudyFolder
from mrics.report.view import PlaneView
from mrics.report.words import number
from mrics.scan import Axes

Place = tuple[int, int]
_KIND = re.compile(r"feature_(\d+)")


@dataclass(frozen=True)
class Site:
    """One place where a feature was put.

    Attributes
    ----------
    place : tuple of int
        Frame and plane.
    row, column : int
        On the page.
    kept : float
        Retained share of its contrast.
    """

    place: Place
    row: int
    column: int
    kept: float


@dataclass(frozen=True)
class Inserted:
    """One feature at all its sites, recovered by one arm.

    Attributes
    ----------
    number : int
        Its place in the table of features, from 1.
    arm : str
    draw : int
    feature : Feature
        As the protocol asks for it.
    sites : tuple of Site
    heights : tuple of float
        What was added at each site.
    stored : StoredMap
        What the feature changes in the recovered magnitude.
    """

    number: int
    arm: str
    draw: int
    feature: Feature
    sites: tuple[Site, ...]
    heights: tuple[float, ...]
    stored: StoredMap

    @property
    def places(self) -> list[Place]:
        """Slices that hold it, in order."""
        return sorted({site.place for site in self.sites})

    @property
    def label(self) -> str:
        """Its name: "disc 2.5 mm, +20 %"."""
        contrast = f"{self.feature.contrast:+g}".replace("-", "−")
        return f"{self.feature.shape} {number(self.feature.size_mm, 2)} mm, {contrast} %"


def is_feature_map(kind: str) -> bool:
    """Whether a stored map is the change that an inserted feature makes."""
    return _KIND.fullmatch(kind) is not None


def inserted_features(study: StudyFolder, scan: str) -> list[Inserted]:
    """Every feature of every unit of a scan whose map is stored."""
    return [one for unit in study.results["units"] for one in _of_unit(study, scan, unit)]


def reference_change(study: StudyFolder, one: Inserted, places: list[Place]) -> NDArray[np.float32]:
    """What the feature adds to the reference's magnitude, shape (slice, row, column)."""
    entry = study.scan(one.stored.scan)
    view, axes = study.view(entry), _axes(study)
    mm = [float(entry["voxel_mm"][axis]) for axis in axes.order]
    patch = one.feature.patch((mm[0], mm[1], mm[2]))
    if view.row_axis != axes.order[1]:
        patch = patch.transpose(0, 2, 1)
    patch = patch[:, :: -1 if view.flip_rows else 1, :: -1 if view.flip_columns else 1]
    out = np.zeros((len(places), view.rows, view.columns), dtype=np.float32)
    half = [n // 2 for n in patch.shape]
    for site, height in zip(one.sites, one.heights, strict=True):
        rows = slice(site.row - half[1], site.row + half[1] + 1)
        columns = slice(site.column - half[2], site.column + half[2] + 1)
        for position, (frame, plane) in enumerate(places):
            depth = plane - site.place[1] + half[0]
            if frame == site.place[0] and 0 <= depth < len(patch):
                out[position, rows, columns] += np.float32(height) * patch[depth]
    return out


def recovered_change(study: StudyFolder, one: Inserted, places: list[Place]) -> NDArray[np.float32]:
    """What it changes in the recovered magnitude, 0 where it was not measured."""
    stack = [study.planes(one.stored, [plane], frame)[0] for frame, plane in places]
    return np.nan_to_num(np.asarray(stack, dtype=np.float32))


def _of_unit(study: StudyFolder, scan: str, unit: dict[str, Any]) -> Iterator[Inserted]:
    rows = (unit.get("measures") or {}).get("features") or []
    if not rows or unit["scan"] != scan or not unit.get("slices"):
        return
    maps = {
        m.kind: m
        for m in study.maps
        if (m.scan, m.arm, m.draw) == (scan, unit["arm"], unit["draw"]) and m.present
    }
    view, axes = study.view(study.scan(scan)), _axes(study)
    for count, row in enumerate(rows, start=1):
        stored = maps.get(f"feature_{count}")
        if stored is None or not row.get("placed"):
            continue
        feature = Feature(
            row["shape"], row["nominal_mm"], row["contrast"], row["length_mm"], row["angle_deg"]
        )
        sites = tuple(_site(unit, view, axes, one) for one in row["placed"])
        heights = tuple(float(one["height"]) for one in row["placed"])
        draw = int(unit["draw"])
        yield Inserted(count, unit["arm"], draw, feature, sites, heights, stored)


def _site(unit: dict[str, Any], view: PlaneView, axes: Axes, one: dict[str, Any]) -> Site:
    held = unit["slices"][one["plane"]]
    at = {axes.order[1]: int(one["u"]), axes.order[2]: int(one["v"])}
    row, column = at[view.row_axis], at[view.column_axis]
    return Site(
        (int(held.get("frame") or 0), int(held["index"])),
        view.rows - 1 - row if view.flip_rows else row,
        view.columns - 1 - column if view.flip_columns else column,
        float(one["retained"]),
    )


def _axes(study: StudyFolder) -> Axes:
    grid = study.results["protocol"]["values"]["grid"]
    return Axes(grid["readout_axis"], grid["phase_axis"], grid.get("partition_axis"))
