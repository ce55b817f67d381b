"""Run a study: units through an executor, each kept in the ledger, then results.json."""

from __future__ import annotations

import shutil
import time
from collections.abc import Callable, Sequence
from concurrent.futures import BrokenExecutor, Executor, as_completed
from pathlib import Path
from typing import Any

from mrics.errors import StudyError
from mrics.protocol import Protocol, load_protocol
from mrics.study.executors import InProcess, cluster_executor, fitting_workers, pool
from mrics.study.files import plain, write_json, write_text
from mrics.study.folder import claim_folder
from mrics.study.ledger import Ledger
from mrics.study.plan import StudyPlan, plan_study
from mrics.study.results import scan_record, slice_table, study_results, write_references
from mrics.study.scratch import SCRATCH, ScratchError, write_scratch
from mrics.study.units import Unit, run_unit_here, run_unit_shared

Progress = Callable[[int, int, str], None]


def run_study(
    protocol: Protocol | str | Path,
    out: str | Path,
    *,
    quick: bool = False,
    force: bool = False,
    workers: int | None = 1,
    cluster: str | None = None,
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
    workers : int or None
        Processes with one compute thread each; None for as many as cores and free memory allow. 1
        computes in this process, with every thread (a script that asks for more needs the usual
        ``if __name__ == "__main__":`` guard).
    cluster : str, optional
        Address of a Dask scheduler (``tcp://host:port``), or ``local``; in place of ``workers``.
        Its workers must see the study folder under the same path.
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
    records = [scan_record(plan, number) for number in range(len(plan.scans))]
    claim_folder(folder, protocol, force)
    with Ledger(folder) as ledger:
        units = plan.units(folder, [record["sha256"] for record in records])
        references = write_references(plan, folder)
        work = _Work(plan, folder, ledger, progress)
        try:
            results = work.run(units, workers, cluster)
        finally:
            shutil.rmtree(folder / SCRATCH, ignore_errors=True)
        content = study_results(plan, records, results, references)
        content["timing"] = {
            "study_s": time.perf_counter() - started,
            "units": [{"key": r["key"], **r["timing"]} for r in results],
        }
        write_json(folder / "results.json", content)
        write_text(folder / "results.csv", slice_table(results))
    loaded: dict[str, Any] = plain(content)
    return loaded


class _Work:
    """The units of one run: what the ledger holds already, and the rest through an executor."""

    def __init__(
        self, plan: StudyPlan, folder: Path, ledger: Ledger, progress: Progress | None
    ) -> None:
        self._plan = plan
        self._folder = folder
        self._ledger = ledger
        self._progress = progress
        self._done: dict[str, dict[str, Any]] = {}
        self._total = 0

    def run(
        self, units: Sequence[Unit], workers: int | None, cluster: str | None
    ) -> list[dict[str, Any]]:
        """Results of all units, in their order."""
        kept = self._ledger.finished(unit.key for unit in units)
        self._done = {u.key: kept[u.key] for u in units if _usable(u, kept.get(u.key))}
        self._total = len({unit.key for unit in units})
        if self._progress is not None:
            self._progress(len(self._done), self._total, "")
        waiting = {unit.key: unit for unit in units if unit.key not in self._done}
        self._compute(list(waiting.values()), workers, cluster)
        return [_labelled(self._done[unit.key], unit) for unit in units]

    def _compute(self, waiting: list[Unit], workers: int | None, cluster: str | None) -> None:
        if workers is None:
            workers = fitting_workers(self._plan.scan_bytes(), len(waiting))
        if cluster is None and (workers == 1 or len(waiting) <= 1):
            with InProcess() as here:
                for unit in waiting:
                    self._note(unit, here.submit(run_unit_here, unit).result())
            return
        for number, scan_id in enumerate(self._plan.scan_ids):
            if any(unit.scan_id == scan_id for unit in waiting):
                self._write_scratch(number)
        if cluster is None:
            with pool(min(workers, len(waiting))) as executor:
                self._spread(executor, waiting)
            return
        with cluster_executor(cluster) as executor:
            self._spread(executor, waiting)

    def _spread(self, executor: Executor, waiting: Sequence[Unit]) -> None:
        """Run units on an executor; a damaged scratch is made again, once for every unit."""
        futures = {executor.submit(run_unit_shared, unit): unit for unit in waiting}
        again: list[Unit] = []
        try:
            for future in as_completed(futures):
                unit = futures[future]
                try:
                    self._note(unit, future.result())
                except ScratchError:
                    again.append(unit)
            for number, scan_id in enumerate(self._plan.scan_ids):
                mine = [unit for unit in again if unit.scan_id == scan_id]
                if mine:
                    self._write_scratch(number)
                for unit in mine:
                    self._note(unit, executor.submit(run_unit_shared, unit).result())
        except BrokenExecutor as error:
            raise StudyError(
                "A worker process was ended from outside (out of memory, or killed).",
                str(self._folder),
                "Run again to go on: finished units are kept. Fewer --workers need less memory.",
            ) from error
        finally:
            for future in futures:
                future.cancel()

    def _write_scratch(self, number: int) -> None:
        scan = self._plan.prepared(number)
        write_scratch(scan, self._folder / SCRATCH / self._plan.scan_ids[number])

    def _note(self, unit: Unit, result: dict[str, Any]) -> None:
        self._ledger.commit(unit.key, result)
        self._done[unit.key] = result
        if self._progress is not None:
            label = f"{unit.arm.label}, {unit.scan_id}, draw {unit.draw}"
            self._progress(len(self._done), self._total, label)


def _usable(unit: Unit, result: dict[str, Any] | None) -> bool:
    """Whether a kept result is there with every map it names."""
    if result is None or (unit.keep_maps and not result["maps"]):
        return False
    return all((unit.folder / entry["file"]).is_file() for entry in result["maps"])


def _labelled(result: dict[str, Any], unit: Unit) -> dict[str, Any]:
    """A result under the unit's own labels: equal content may have been computed under others."""
    label = {"arm": unit.arm.id, "scan": unit.scan_id}
    maps = [{**entry, **label} for entry in result["maps"]]
    return {**result, **label, "maps": maps}
