"""Reading a finished (or interrupted) study folder: results.json and the maps it names."""

from __future__ import annotations

import json
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import ReportError
from mrics.report.view import PlaneView, plane_view

SCHEMA = 1
_REQUIRED = ("mrics", "schema", "protocol", "scans", "units", "arms")


@dataclass(frozen=True)
class StoredMap:
    """One NIfTI map that results.json names.

    Attributes
    ----------
    kind : str
        "reference", "recovered", "error", "error_complex", "body", "pattern" or another map.
    scan, arm : str
        Identifiers, "" where the map does not depend on them.
    draw : int or None
        Draw, None where the map does not depend on it.
    path : Path
        Where it is.
    name : str
        The path as results.json writes it, for messages.
    """

    kind: str
    scan: str
    arm: str
    draw: int | None
    path: Path
    name: str

    @property
    def present(self) -> bool:
        """Whether the file is there."""
        return self.path.is_file()

    def load(self) -> tuple[NDArray[Any], NDArray[np.float64]]:
        """Data and affine; a file that cannot be read is an error that names it."""
        import nibabel

        try:
            image: Any = nibabel.load(self.path)
            return np.asanyarray(image.dataobj), np.asarray(image.affine, dtype=float)
        except Exception as problem:  # nibabel raises many kinds, zlib and OSError among them
            raise ReportError(
                f"The stored map {self.name} cannot be read ({type(problem).__name__}).",
                self.name,
                "Run the study again on this folder, or delete the file: the page then leaves it "
                "out and says so.",
            ) from problem


@dataclass(frozen=True)
class StudyFolder:
    """A study as its folder holds it.

    Attributes
    ----------
    directory : Path
        The folder.
    results : dict
        Content of results.json.
    """

    directory: Path
    results: dict[str, Any]
    _cache: dict[Path, Any] = field(default_factory=dict, repr=False, compare=False)

    @property
    def scans(self) -> list[dict[str, Any]]:
        """Entries of the scans."""
        return list(self.results["scans"])

    @property
    def arms(self) -> list[dict[str, Any]]:
        """Entries of the arms, in the order of the protocol."""
        return list(self.results["arms"])

    def scan(self, identity: str) -> dict[str, Any]:
        """Entry of one scan."""
        return next(s for s in self.results["scans"] if s["id"] == identity)

    def units(self, arm: str, scan: str | None = None) -> list[dict[str, Any]]:
        """Units of an arm (and scan), those that have slices."""
        return [
            u
            for u in self.results["units"]
            if u["arm"] == arm and (scan is None or u["scan"] == scan) and u.get("slices")
        ]

    def measures(self, arm: str) -> list[dict[str, Any]]:
        """Tables of further measures of an arm's units, those that have any."""
        return [u["measures"] for u in self.units(arm) if u.get("measures")]

    @cached_property
    def maps(self) -> tuple[StoredMap, ...]:
        """Every map that results.json names and that lies inside the folder."""
        out = []
        for entry in self.results.get("maps", []):
            name = str(entry["file"])
            path = (self.directory / name).resolve()
            if not path.is_relative_to(self.directory.resolve()):
                raise ReportError(
                    f"results.json names a map outside the study folder: {name}.",
                    "results.json, maps",
                    "Keep the maps inside the folder, with relative names.",
                )
            out.append(
                StoredMap(
                    str(entry["kind"]),
                    str(entry.get("scan") or ""),
                    str(entry.get("arm") or ""),
                    entry.get("draw"),
                    path,
                    name,
                )
            )
        return tuple(out)

    @property
    def missing(self) -> tuple[str, ...]:
        """Names of maps that results.json names and the folder lacks."""
        return tuple(m.name for m in self.maps if not m.present)

    def find(
        self, kind: str, scan: str = "", arm: str = "", draw: int | None = None
    ) -> StoredMap | None:
        """A map that is there, or None; ``draw=None`` takes the first stored one."""
        for stored in self.maps:
            if stored.kind != kind or not stored.present:
                continue
            if scan and stored.scan and stored.scan != scan:
                continue
            if arm and stored.arm and stored.arm != arm:
                continue
            if draw is not None and stored.draw is not None and stored.draw != draw:
                continue
            return stored
        return None

    def view(self, scan: dict[str, Any]) -> PlaneView:
        """How planes of this scan lie on the page, from the affine of its first stored map."""
        stored = next((m for m in self.maps if m.scan == scan["id"] and m.present), None)
        affine = np.eye(4) if stored is None or stored.kind == "pattern" else None
        if affine is None:
            assert stored is not None
            affine = self._opened(stored)[1]
        return plane_view(affine, scan["plane_axis"], tuple(scan["shape"]), scan["voxel_mm"])

    def planes(
        self, stored: StoredMap, indices: list[int], frame: int = 0
    ) -> NDArray[np.float32] | NDArray[np.complex64]:
        """Planes of a map as the page shows them, shape (planes, rows, columns).

        Parameters
        ----------
        stored : StoredMap
            A map in file axes, either over the whole volume or over the studied planes alone.
        indices : list of int
            Plane numbers in the scan.
        frame : int
            Frame of a map with a fourth axis.
        """
        data = self._opened(stored)[0]
        scan = self.scan(stored.scan)
        view = self.view(scan)
        axis = view.plane_axis
        if data.ndim == 4:
            data = data[..., min(frame, data.shape[3] - 1)]
        studied = [int(p) for p in scan.get("planes") or range(scan["shape"][axis])]
        if data.shape[axis] == scan["shape"][axis]:
            rows = list(indices)
        elif data.shape[axis] == len(studied):
            rows = [studied.index(i) for i in indices]
        else:
            raise ReportError(
                f"The stored map {stored.name} has shape {data.shape}, the scan "
                f"{tuple(scan['shape'])}.",
                stored.name,
                "Run the study again on this folder.",
            )
        return view.turn(np.take(data, rows, axis=axis))

    def _opened(self, stored: StoredMap) -> tuple[NDArray[Any], NDArray[np.float64]]:
        """The last few maps stay open, so that walking slices does not read files again."""
        if stored.path not in self._cache:
            while len(self._cache) >= 4:
                self._cache.pop(next(iter(self._cache)))
            self._cache[stored.path] = stored.load()
        return self._cache[stored.path]


def open_folder(directory: str | Path) -> StudyFolder:
    """Read results.json of a study folder.

    Raises
    ------
    ReportError
        No folder, no results.json, not JSON, a key that every study has is missing, or results
        written by a newer version.
    """
    folder = Path(directory)
    path = folder / "results.json"
    if not path.is_file():
        raise ReportError(
            f"{folder} holds no results.json.",
            str(path),
            "Give the folder that `mrics run PROTOCOL --out DIR` wrote; the same command goes on "
            "with a run that was killed, and finished units are kept.",
        )
    try:
        # NaN and infinity are no JSON; other writers may still put them there.
        text = path.read_text(encoding="utf-8")
        results = json.loads(text, parse_constant=lambda _: None)
    except (ValueError, OSError) as problem:
        raise ReportError(
            f"results.json cannot be read: {problem}.",
            str(path),
            "Run the study again on this folder; finished units are kept.",
        ) from problem
    lacking = [k for k in _REQUIRED if not isinstance(results, dict) or k not in results]
    if lacking:
        raise ReportError(
            f"results.json lacks {', '.join(lacking)}.",
            str(path),
            "Run the study again on this folder; finished units are kept.",
        )
    if not isinstance(results["schema"], int) or results["schema"] > SCHEMA:
        raise ReportError(
            f"results.json has schema {results['schema']!r} (mrics {results['mrics']}); this "
            f"version reads schema {SCHEMA} and older.",
            str(path),
            f"Draw the report with mrics {results['mrics']} or newer.",
        )
    return StudyFolder(folder, results)
