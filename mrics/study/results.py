"""From units to what results.json and results.csv hold."""

from __future__ import annotations

import csv
import io
import os
import platform
from collections.abc import Iterator, Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np

import mrics
from mrics.caution import RESEARCH_ONLY
from mrics.errors import QualityError
from mrics.quality.planes import check_regions
from mrics.scan import Scan, write_nifti
from mrics.study.aggregate import ArmNumbers, arm_numbers
from mrics.study.answer import KEPT_LEVEL, overall_verdict, smallest_kept
from mrics.study.channels import channel_picture
from mrics.study.code_version import code_version
from mrics.study.files import plain, without_folders
from mrics.study.measure_notes import measure_notes
from mrics.study.notes import study_notes
from mrics.study.plan import PlanRow, StudyPlan
from mrics.study.prepare import Prepared

SCHEMA = 1


def scan_record(plan: StudyPlan, number: int) -> dict[str, Any]:
    """What is known of a scan before any line is left out."""
    scan = plan.prepared(number)
    _check_regions(plan, number, scan)
    return {
        "id": plan.scan_ids[number],
        "name": plan.scans[number].name,
        "sha256": scan.scan.sha256,
        "shape": list(scan.scan.shape),
        "voxel_mm": list(scan.scan.voxel_mm),
        "complex_source": scan.scan.complex_source,
        "plane_axis": scan.axes.plane,
        "planes": list(scan.planes),
        "frames": scan.scan.frames,
        "channels": scan.scan.channels,
        "receive": scan.receive.as_dict() if scan.receive else None,
        "sigma": scan.sigma,
        "snr": scan.snr,
        "sigma_added": plan.noise.added(scan),
        "data_range": scan.data_range,
        "nrmse_floor": scan.nrmse_floor,
        "findings": [asdict(finding) for finding in scan.findings],
    }


def _check_regions(plan: StudyPlan, number: int, scan: Prepared) -> None:
    """Whether the measures asked for fit the scan; told before the study starts."""
    measures = plan.protocol.measures()
    if measures is None:
        return
    mm = scan.scan.voxel_mm
    plane, u, v = (mm[axis] for axis in plan.axes.order)
    try:
        check_regions(scan.stack, scan.body, scan.labels, measures, (plane, u, v))
    except QualityError as error:
        where = f"{plan.protocol.path}: scan {plan.scan_ids[number]}; {error.where}"
        raise QualityError(error.what, where, error.fix) from error


def write_references(plan: StudyPlan, folder: Path) -> list[dict[str, Any]]:
    """Write every scan's reference, body mask and sensitivities; return their map entries."""
    written = []
    for number, scan_id in enumerate(plan.scan_ids):
        scan = plan.prepared(number)
        for kind, stack in (
            ("reference", np.abs(scan.stack).astype(np.float32)),
            ("body", scan.body.astype(np.uint8)),
        ):
            written.append(_reference(folder, scan_id, kind, scan.to_volume(stack), scan.scan))
        picture = channel_picture(scan)
        if picture is not None:
            written.append(_reference(folder, scan_id, "sensitivities", picture.data, picture))
    return written


def _reference(folder: Path, scan_id: str, kind: str, volume: Any, like: Scan) -> dict[str, Any]:
    """Write a map that belongs to a scan alone; its entry."""
    path = folder / "reference" / f"{scan_id}_{kind}.nii.gz"
    path.parent.mkdir(exist_ok=True)
    write_nifti(path, volume, like)
    file = path.relative_to(folder).as_posix()
    return {"kind": kind, "scan": scan_id, "arm": None, "draw": None, "file": file}


def study_results(
    plan: StudyPlan,
    rows: Sequence[PlanRow],
    records: list[dict[str, Any]],
    results: list[dict[str, Any]],
    references: list[dict[str, Any]],
) -> dict[str, Any]:
    """Everything but the timings: arm numbers are computed from the units alone."""
    protocol = plan.protocol
    by_arm = {row.arm.id: [r for r in results if r["arm"] == row.arm.id] for row in rows}
    finished = {arm: units for arm, units in by_arm.items() if units}
    today = next((row.arm.id for row in rows if row.arm.today and row.arm.id in finished), None)
    # Before the baseline has finished, no difference to it can be judged.
    baseline = plan.baseline if plan.baseline in finished else None
    waits = baseline is None and plan.baseline is not None
    limits = [x for x in protocol.acceptance if not waits or x.kind in ("mean", "worst")]
    numbers = arm_numbers(finished, limits, today, protocol.study.seed, baseline=baseline)
    asked = (x.value for x in limits if x.key == "feature_retention_min")
    level = next(asked, KEPT_LEVEL)
    arms = [
        {
            **without_folders(row.as_dict()),
            **_arm_record(row, by_arm[row.arm.id], numbers.get(row.arm.id)),
            "smallest_kept": smallest_kept(by_arm[row.arm.id], level),
        }
        for row in rows
    ]
    maps = references + [entry for r in results for entry in r["maps"]]
    units_out = [{k: v for k, v in r.items() if k not in ("timing", "maps")} for r in results]
    return {
        "mrics": mrics.__version__,
        "schema": SCHEMA,
        "caution": RESEARCH_ONLY,
        "protocol": {
            "title": protocol.title,
            "question": protocol.question,
            "text": without_folders(protocol.text),
            "sha256": protocol.sha256,
            "values": without_folders(protocol.values()),
        },
        "scans": records,
        "units": units_out,
        "arms": arms,
        "baseline": plan.baseline,
        "verdict": overall_verdict(arms, len(records)),
        "maps": maps,
        "notes": [
            *study_notes(plan, records),
            *measure_notes(results, {row.arm.id: row.arm.label for row in rows}),
        ],
        "provenance": provenance(protocol.study.seed),
    }


def _arm_record(
    row: PlanRow, units: list[dict[str, Any]], numbers: ArmNumbers | None
) -> dict[str, Any]:
    """Numbers of one arm; an arm of an interrupted run without any unit has those of its plan."""
    if numbers is None:
        return {
            "acceleration": row.pattern.acceleration,
            "acceleration_in_shutter": row.pattern.acceleration_in_shutter,
            "acquired": float(row.pattern.acquired),
            "metrics": {},
            "against_today": {},
            "against_baseline": {},
            "verdict": {
                "status": "undecided",
                "limits": [],
                "confidence": "No unit of an arm is finished.",
            },
            "certificates": {"reached": 0, "of": 0, "certified": True, "note": ""},
            "weight": "",
        }
    certificates = [u["certificate"] for u in units]
    acquired = sorted({note for u in units for note in u["acquisition"]})
    return {
        "acceleration": float(np.mean([u["acceleration"] for u in units])),
        "acceleration_in_shutter": float(np.mean([u["acceleration_in_shutter"] for u in units])),
        "acquired": float(np.mean([u["acquired"] for u in units])),
        "metrics": numbers.metrics,
        "against_today": numbers.comparisons,
        "against_baseline": numbers.differences,
        "verdict": numbers.verdict,
        "certificates": {
            "reached": sum(bool(c["reached"]) for c in certificates),
            "of": len(certificates),
            "certified": all(c["certified"] for c in certificates),
            "note": "; ".join([*acquired, *sorted({c["note"] for c in certificates if c["note"]})]),
        },
        "weight": _weight_words(certificates),
    }


def _weight_words(certificates: Sequence[dict[str, Any]]) -> str:
    """Weights of an arm's units and how they were chosen, for the report."""
    weights = [c["weight"] for c in certificates if c["weight"] is not None]
    if not weights:
        return ""
    ends = dict.fromkeys(f"{end(weights):.3g}" for end in (min, max))
    unit = certificates[0]["weight_unit"]
    # What follows the first comma is the search's cost, which differs from unit to unit.
    rules = sorted({c["weight_rule"].split(",")[0] for c in certificates})
    return f"{' to '.join(ends)} {unit} ({'; '.join(rules)})"


def provenance(seed: int) -> dict[str, Any]:
    """Versions, seed and kind of machine; no user, host or path."""
    from importlib.metadata import version

    packages = ("numpy", "scipy", "numba", "nibabel", "PyWavelets")
    return {
        "mrics": mrics.__version__,
        "code": code_version(),
        "python": platform.python_version(),
        "packages": {name: version(name) for name in packages},
        "machine": f"{platform.system()} {platform.machine()}, {os.cpu_count()} cores",
        "seed": seed,
    }


def slice_table(results: Sequence[dict[str, Any]]) -> str:
    """One line per unit and slice, with the arm's and unit's numbers beside it."""
    stream = io.StringIO()
    scored = list(dict.fromkeys(k for r in results for part in r["slices"] for k in part))[2:]
    head = ["arm", "scan", "draw", "slice", "frame", "acceleration", "sigma", "weight", *scored]
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(head)
    for result in results:
        for part in result["slices"]:
            row = [result["arm"], result["scan"], result["draw"], part["index"], part["frame"]]
            row += [plain(result[k]) for k in ("acceleration", "sigma", "weight")]
            row += [plain(part.get(name)) for name in scored]
            writer.writerow(["" if value is None else value for value in row])
    return stream.getvalue()


def measure_table(results: Sequence[dict[str, Any]]) -> str:
    """Tables of further measures as one line per value, named by its path ("features.0.retained").

    Empty where no unit has any.
    """
    rows = [
        [result["arm"], result["scan"], result["draw"], path, plain(value)]
        for result in results
        for path, value in _values(result.get("measures") or {})
    ]
    if not rows:
        return ""
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(["arm", "scan", "draw", "measure", "value"])
    writer.writerows(["" if value is None else value for value in row] for row in rows)
    return stream.getvalue()


def _values(table: Any, path: str = "") -> Iterator[tuple[str, Any]]:
    """Every single value inside tables and lists, with the way to it."""
    if isinstance(table, dict | list):
        pairs = table.items() if isinstance(table, dict) else enumerate(table)
        for key, value in pairs:
            yield from _values(value, f"{path}.{key}" if path else str(key))
    else:
        yield path, table
