"""The images a page shows: which slices, loaded once from the stored maps.

Every slice that fits is taken. Where a study is too large, the worst and the median slice of every
arm and those with inserted features come first, then slices spread evenly, and the page says so.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.report.folder import StoredMap, StudyFolder
from mrics.report.inserted import Inserted, inserted_features, is_feature_map
from mrics.report.summary import shown_slices
from mrics.report.view import PlaneView
from mrics.scan.volume import LETTERS

PIXEL_LIMIT = 40_000_000
"""Largest number of image values held at once (four bytes each)."""

_MAIN = ("reference", "recovered", "error", "body", "pattern", "order", "atoms", "atom_use")

Place = tuple[int, int]


@dataclass(frozen=True)
class RecoveredStack:
    """Recovered magnitudes of one arm, scan and draw, shape (slice, row, column), float32."""

    arm: str
    draw: int
    image: NDArray[np.float32]


@dataclass(frozen=True)
class FurtherMap:
    """Another stored map of an arm, scan and draw, NaN where it has no value."""

    kind: str
    arm: str
    draw: int
    stored: StoredMap


@dataclass(frozen=True)
class ScanPictures:
    """Images of one scan.

    Attributes
    ----------
    entry : dict
        The scan's entry in results.json.
    view : PlaneView
        How its planes lie on the page.
    places : list of (frame, plane)
        Slices held, in order.
    important : list of int
        Positions of the worst and median slices of the arms, and of those with features.
    available : int
        Slices the study has of this scan.
    reference : ndarray of shape (slice, row, column), float32
    body : ndarray of bool, same shape
    recovered : list of RecoveredStack
        In the order of the arms.
    further : list of FurtherMap
        Maps of quality measures; read when they are packed.
    features : list of Inserted
        Features that the study inserted.
    not_finite : dict of str to int
        Stored maps with values that are not finite, and how many; they are drawn as 0.
    """

    entry: dict[str, Any]
    view: PlaneView
    places: list[Place]
    important: list[int]
    available: int
    reference: NDArray[np.float32]
    body: NDArray[np.bool_]
    recovered: list[RecoveredStack] = field(default_factory=list)
    further: list[FurtherMap] = field(default_factory=list)
    features: list[Inserted] = field(default_factory=list)
    not_finite: dict[str, int] = field(default_factory=dict)

    def of_arm(self, arm: str) -> RecoveredStack | None:
        """First stored draw of an arm."""
        return next((r for r in self.recovered if r.arm == arm), None)

    def position(self, row: dict[str, Any]) -> int | None:
        """Where a slice's entry of results.json is held."""
        place = (int(row.get("frame") or 0), int(row["index"]))
        return self.places.index(place) if place in self.places else None


def studied(scan: dict[str, Any]) -> list[int]:
    """Plane numbers of a scan that were studied."""
    axis = LETTERS.index(scan["plane_axis"])
    return [int(i) for i in scan.get("planes") or range(scan["shape"][axis])]


def load_pictures(study: StudyFolder, pixel_limit: int = PIXEL_LIMIT) -> list[ScanPictures]:
    """Images of every scan whose reference is stored, each map read once."""
    shares = [_stacks(study, scan) for scan in study.scans]
    total = sum(
        _slices(scan) * (1 + len(s)) * _pixels(scan)
        for scan, s in zip(study.scans, shares, strict=True)
    )
    keep = min(1.0, pixel_limit / max(1, total))
    out = []
    for scan, stored in zip(study.scans, shares, strict=True):
        reference = study.find("reference", scan["id"])
        if reference is None:
            continue
        features = inserted_features(study, scan["id"])
        first = _important(study, scan, stored, features)
        places = _spread(scan, first, max(2, int(keep * _slices(scan))))
        body = study.find("body", scan["id"])
        bad: dict[str, int] = {}
        truth = _magnitude(study, reference, places, bad)
        pictures = ScanPictures(
            scan,
            study.view(scan),
            places,
            [places.index(p) for p in first],
            _slices(scan),
            truth,
            _magnitude(study, body, places, bad) > 0 if body else np.ones(truth.shape, dtype=bool),
            features=features,
            not_finite=bad,
        )
        for one in stored:
            image = _magnitude(study, one, places, bad)
            pictures.recovered.append(RecoveredStack(one.arm, int(one.draw or 0), image))
        shown = {(one.arm, one.draw) for one in pictures.recovered}
        for one in study.maps:
            key = (one.arm, int(one.draw or 0))
            measure = one.kind not in _MAIN and not is_feature_map(one.kind)
            if one.scan == scan["id"] and one.present and measure and key in shown:
                pictures.further.append(FurtherMap(one.kind, *key, one))
        out.append(pictures)
    return out


def _important(
    study: StudyFolder, scan: dict[str, Any], stored: list[StoredMap], features: list[Inserted]
) -> list[Place]:
    """Worst and median slices of every stored recovery, then those with inserted features."""
    first: dict[Place, None] = {}
    for one in stored:
        for row in shown_slices(study, one.arm, scan["id"], one.draw).values():
            first[(int(row.get("frame") or 0), int(row["index"]))] = None
    first |= dict.fromkeys(place for one in features for place in one.places)
    return [place for place in first if place[1] in studied(scan)]


def _spread(scan: dict[str, Any], first: list[Place], count: int) -> list[Place]:
    """All slices, or the important ones and others spread evenly, about ``count`` in all."""
    every = [(f, i) for f in range(int(scan.get("frames") or 1)) for i in studied(scan)]
    if count >= len(every):
        return every
    spread = [every[int((k + 0.5) * len(every) / count)] for k in range(count)]
    return sorted(list(dict.fromkeys([*first, *spread]))[: max(count, len(first))])


def _stacks(study: StudyFolder, scan: dict[str, Any]) -> list[StoredMap]:
    """Recovered maps of a scan that are there, arm by arm."""
    order = {arm["id"]: number for number, arm in enumerate(study.arms)}
    stored = [
        m
        for m in study.maps
        if m.kind == "recovered" and m.scan == scan["id"] and m.present and m.arm in order
    ]
    return sorted(stored, key=lambda m: (order[m.arm], m.draw or 0))


def _slices(scan: dict[str, Any]) -> int:
    return len(studied(scan)) * int(scan.get("frames") or 1)


def _pixels(scan: dict[str, Any]) -> int:
    plane = LETTERS.index(scan["plane_axis"])
    return int(np.prod([n for a, n in enumerate(scan["shape"][:3]) if a != plane]))


def load_further(
    study: StudyFolder, further: FurtherMap, places: list[Place]
) -> NDArray[np.float32]:
    """Values of a further map at slices, NaN where there is none."""
    return _slices_of(study, further.stored, places)


def _magnitude(
    study: StudyFolder, stored: StoredMap, places: list[Place], bad: dict[str, int]
) -> NDArray[np.float32]:
    """Magnitudes of a map at the slices; values that are not finite become 0 and are counted."""
    stack = _slices_of(study, stored, places)
    count = stack.size - int(np.isfinite(stack).sum())
    if count:
        bad[stored.name] = count
    return np.nan_to_num(stack, copy=False, nan=0.0, posinf=0.0, neginf=0.0)


def _slices_of(study: StudyFolder, stored: StoredMap, places: list[Place]) -> NDArray[np.float32]:
    frames = dict.fromkeys(frame for frame, _ in places)
    parts = [study.planes(stored, [i for f, i in places if f == frame], frame) for frame in frames]
    with np.errstate(over="ignore", invalid="ignore"):
        return np.abs(np.concatenate(parts)).astype(np.float32)
