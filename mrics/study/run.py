"""Run a study: units through an executor, one result file each, then results.json."""

from __future__ import annotations

import csv
import io
import multiprocessing
import os
import platform
import time
from collections.abc import Callable, Sequence
from concurrent.futures import Executor, Future, ProcessPoolExecutor, as_completed
from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np

import mrics
from mrics.caution import RESEARCH_ONLY
from mrics.protocol import Protocol, load_protocol
from mrics.scan import write_nifti
from mrics.study.aggregate import arm_numbers, overall_verdict
from mrics.study.code_version import code_version
from mrics.study.files import plain, read_json, write_json, write_text
from mrics.study.folder import claim_folder
from mrics.study.plan import StudyPlan, plan_study
from mrics.study.prepare import Prepared, prepare
from mrics.study.units import Unit, run_unit, set_worker_threads

SCHEMA = 1
Progress = Callable[[int, int, str], None]


class InProcess(Executor):
    """The executor that computes at once, in this process (planes still use every thread)."""

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        """Run the call and return its finished future."""
        future: Future[Any] = Future()
        try:
            future.set_result(fn(*args, **kwargs))
        except Exception as error:
            future.set_exception(error)
        return future


def run_study(
    protocol: Protocol | str | Path,
    out: str | Path,
    *,
    quick: bool = False,
    force: bool = False,
    workers: int = 1,
    progress: Progress | None = None,
) -> dict[str, Any]:
    """Undersample, recover and measure every scan in every arm and draw.

    Parameters
    ----------
    protocol : Protocol, str or Path
        The protocol or its file.
    out : str or Path
        Study folder; made where it does not exist. Units finished in an earlier run are kept.
    quick : bool
        Few slices (``quick_slices`` of the protocol).
    force : bool
        Go on in a folder that holds another protocol's study.
    workers : int
        Processes; 1 computes in this process.
    progress : callable, optional
        Called with (units done, units in all, label) after every unit.

    Returns
    -------
    dict
        What ``results.json`` holds.

    Raises
    ------
    MricsError
        Where the protocol, a scan or the folder cannot be used; nothing is written then.
    """
    started = time.perf_counter()
    if not isinstance(protocol, Protocol):
        protocol = load_protocol(protocol)
    plan = plan_study(protocol, quick=quick)
    folder = Path(out)
    records = [_scan_record(plan, number) for number in range(len(plan.scans))]
    claim_folder(folder, protocol, force)
    units = plan.units(folder, [record["sha256"] for record in records])
    references = _write_references(plan, folder)
    results = _run_units(units, workers, progress)
    content = _results(plan, records, results, references)
    content["timing"] = {
        "study_s": time.perf_counter() - started,
        "units": [{"key": r["key"], **r["timing"]} for r in results],
    }
    write_json(folder / "results.json", content)
    write_text(folder / "results.csv", _table(results))
    loaded: dict[str, Any] = plain(content)
    return loaded


def _run_units(
    units: Sequence[Unit], workers: int, progress: Progress | None
) -> list[dict[str, Any]]:
    done = {unit.key: result for unit in units if (result := _finished(unit)) is not None}
    if progress is not None:
        progress(len(done), len(units), "")
    waiting = [unit for unit in units if unit.key not in done]
    executor: Executor = InProcess()
    if workers > 1 and len(waiting) > 1:
        executor = ProcessPoolExecutor(
            min(workers, len(waiting)),
            mp_context=multiprocessing.get_context("spawn"),
            initializer=set_worker_threads,
        )

    def note(unit: Unit, result: dict[str, Any]) -> None:
        done[unit.key] = result
        if progress is not None:
            progress(len(done), len(units), f"{unit.arm.label}, {unit.scan_id}, draw {unit.draw}")

    with executor:
        if isinstance(executor, InProcess):
            for unit in waiting:
                note(unit, executor.submit(run_unit, unit).result())
        else:
            futures = {executor.submit(run_unit, unit): unit for unit in waiting}
            try:
                for future in as_completed(futures):
                    note(futures[future], future.result())
            except BaseException:
                executor.shutdown(wait=False, cancel_futures=True)
                raise
    return [_labelled(done[unit.key], unit) for unit in units]


def _finished(unit: Unit) -> dict[str, Any] | None:
    """The unit's result where it and every map it names are there."""
    result = read_json(unit.result_path)
    if not isinstance(result, dict) or result.get("key") != unit.key:
        return None
    maps = result.get("maps", [])
    if unit.keep_maps and not maps:
        return None
    if any(not (unit.folder / entry["file"]).is_file() for entry in maps):
        return None
    return result


def _labelled(result: dict[str, Any], unit: Unit) -> dict[str, Any]:
    """A result under the unit's own labels: equal content may have been computed under others."""
    label = {"arm": unit.arm.id, "scan": unit.scan_id}
    maps = [{**entry, **label} for entry in result["maps"]]
    return {**result, **label, "maps": maps}


def _scan_record(plan: StudyPlan, number: int) -> dict[str, Any]:
    scan = _prepared(plan, number)
    return {
        "id": plan.scan_ids[number],
        "name": scan.scan.name,
        "sha256": scan.scan.sha256,
        "shape": list(scan.scan.shape),
        "voxel_mm": list(scan.scan.voxel_mm),
        "complex_source": scan.scan.complex_source,
        "plane_axis": scan.axes.plane,
        "planes": list(scan.planes),
        "frames": scan.scan.frames,
        "sigma": scan.sigma,
        "snr": scan.snr,
        "sigma_added": plan.noise.added(scan),
        "data_range": scan.data_range,
        "nrmse_floor": scan.nrmse_floor,
        "findings": [asdict(finding) for finding in scan.findings],
    }


def _prepared(plan: StudyPlan, number: int) -> Prepared:
    return prepare(plan.scans[number], plan.axes, plan.choice, plan.channel_axis)


def _write_references(plan: StudyPlan, folder: Path) -> list[dict[str, Any]]:
    written = []
    for number, scan_id in enumerate(plan.scan_ids):
        scan = _prepared(plan, number)
        for kind, stack in (
            ("reference", np.abs(scan.stack).astype(np.float32)),
            ("body", scan.body.astype(np.uint8)),
        ):
            path = folder / "reference" / f"{scan_id}_{kind}.nii.gz"
            path.parent.mkdir(exist_ok=True)
            write_nifti(path, scan.to_volume(stack), scan.scan)
            written.append(
                {
                    "kind": kind,
                    "scan": scan_id,
                    "arm": None,
                    "draw": None,
                    "file": path.relative_to(folder).as_posix(),
                }
            )
    return written


def _results(
    plan: StudyPlan,
    records: list[dict[str, Any]],
    results: list[dict[str, Any]],
    references: list[dict[str, Any]],
) -> dict[str, Any]:
    protocol = plan.protocol
    by_arm = {row.arm.id: [r for r in results if r["arm"] == row.arm.id] for row in plan.rows}
    today = next((row.arm.id for row in plan.rows if row.arm.today), None)
    numbers = arm_numbers(by_arm, protocol.acceptance, today, protocol.study.seed)
    arms = []
    for row in plan.rows:
        units = by_arm[row.arm.id]
        certificates = [u["certificate"] for u in units]
        arms.append(
            {
                **row.as_dict(),
                "acceleration": float(np.mean([u["acceleration"] for u in units])),
                "acceleration_in_shutter": float(
                    np.mean([u["acceleration_in_shutter"] for u in units])
                ),
                "acquired": float(np.mean([u["acquired"] for u in units])),
                "metrics": numbers[row.arm.id].metrics,
                "against_today": numbers[row.arm.id].comparisons,
                "verdict": numbers[row.arm.id].verdict,
                "certificates": {
                    "reached": sum(bool(c["reached"]) for c in certificates),
                    "of": len(certificates),
                    "certified": all(c["certified"] for c in certificates),
                    "note": "; ".join(sorted({c["note"] for c in certificates if c["note"]})),
                },
            }
        )
    maps = references + [entry for r in results for entry in r["maps"]]
    units_out = [{k: v for k, v in r.items() if k not in ("timing", "maps")} for r in results]
    return {
        "mrics": mrics.__version__,
        "schema": SCHEMA,
        "caution": RESEARCH_ONLY,
        "protocol": {
            "title": protocol.title,
            "question": protocol.question,
            "text": protocol.text,
            "sha256": protocol.sha256,
            "values": protocol.values(),
        },
        "scans": records,
        "units": units_out,
        "arms": arms,
        "verdict": overall_verdict(arms),
        "maps": maps,
        "notes": plan.notes(records),
        "provenance": provenance(protocol.study.seed),
    }


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


def _table(results: Sequence[dict[str, Any]]) -> str:
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
