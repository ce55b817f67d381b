"""Run a study: units through an executor, each kept in the ledger, then results.json."""

from __future__ import annotations

import logging
import shutil
import time
from collections.abc import Callable, Sequence
from concurrent.futures import BrokenExecutor, Executor, Future, as_completed
from contextlib import ExitStack, suppress
from pathlib import Path
from typing import Any

from mrics.errors import MricsError, StudyError
from mrics.protocol import Protocol, load_protocol
from mrics.study.executors import (
    InProcess,
    StopAfterUnits,
    check_cluster,
    cluster_executor,
    cluster_lost,
    end_workers,
    fitting_workers,
    pool,
)
from mrics.study.files import plain, write_json, write_text
from mrics.study.folder import claim_folder
from mrics.study.ledger import Ledger
from mrics.study.plan import PlanRow, StudyPlan, plan_study
from mrics.study.results import (
    measure_table,
    scan_record,
    slice_table,
    study_results,
    write_references,
)
from mrics.study.scratch import SCRATCH, ScratchError, write_scratch
from mrics.study.search import search_family
from mrics.study.trained_weights import trained_rows
from mrics.study.units import Unit, run_unit_here, run_unit_shared

Progress = Callable[[int, int, str], None]
_log = logging.getLogger(__name__)


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
    _log.info("planned %d arms on %d scans", len(plan.rows), len(plan.scans))
    folder = Path(out)
    if cluster is not None:
        # Before scans are read, which may take minutes.
        check_cluster(cluster)
    records = [scan_record(plan, number) for number in range(len(plan.scans))]
    claim_folder(folder, protocol, force)
    hashes = [record["sha256"] for record in records]
    # Workers of a cluster stand in other folders.
    seen = folder.absolute()
    with Ledger(folder) as ledger, _Work(plan, folder, ledger, progress, workers, cluster) as work:
        references = write_references(plan, folder)
        rows = [row for row in plan.rows if not row.arm.search]
        try:
            rows = trained_rows(plan, rows, folder, ledger)
            results = work.run(plan.units(seen, hashes, rows))
            found = []
            for family in plan.families().values():
                visited: dict[str, tuple[PlanRow, list[dict[str, Any]]]] = {}

                def looked_at(
                    row: PlanRow,
                    draws: int,
                    visited: dict[str, tuple[PlanRow, list[dict[str, Any]]]] = visited,
                ) -> list[dict[str, Any]]:
                    [row] = trained_rows(plan, [row], folder, ledger)
                    done = work.run(plan.units(seen, hashes, [row], draws))
                    visited[row.arm.id] = (row, done)
                    return done

                limits, seed = protocol.acceptance, protocol.study.seed
                held = _baseline(plan, results)
                found.append(search_family(family, looked_at, limits, held, seed))
                looked = [visited[row.arm.id] for row in family if row.arm.id in visited]
                rows += [row for row, _ in looked]
                results += [result for _, done in looked for result in done]
        except BaseException:
            # What is finished can be looked at; the cause is what the caller hears of.
            with suppress(OSError, MricsError):
                _write_partial(folder, plan, work, records, references, started)
            raise
        content = study_results(plan, rows, records, results, references)
        content["searches"] = [one.as_dict() for one in found]
        _write(folder, content, results, started)
    _log.info("results.json is written, %d units", len(results))
    loaded: dict[str, Any] = plain(content)
    return loaded


def _write_partial(
    folder: Path,
    plan: StudyPlan,
    work: _Work,
    records: list[dict[str, Any]],
    references: list[dict[str, Any]],
    started: float,
) -> None:
    """Results of the units that an interrupted run has finished, with how many were asked for."""
    done = work.finished()
    if done:
        asked = {unit.arm.id for unit in work.asked}
        rows = [row for row in plan.rows if row.arm.id in asked]
        content = study_results(plan, rows, records, done, references)
        content |= {"searches": [], "units_planned": len(work.asked)}
        _write(folder, content, done, started)


def _write(
    folder: Path, content: dict[str, Any], results: list[dict[str, Any]], started: float
) -> None:
    """Write results.json, results.csv and measures.csv; times stand apart from what is compared."""
    content["timing"] = {
        "study_s": time.perf_counter() - started,
        "units": [{"key": r["key"], **r["timing"]} for r in results],
    }
    try:
        write_json(folder / "results.json", content)
        write_text(folder / "results.csv", slice_table(results))
        measured = measure_table(results)
        if measured:
            write_text(folder / "measures.csv", measured)
        else:
            (folder / "measures.csv").unlink(missing_ok=True)
    except OSError as error:
        raise StudyError(
            f"The results cannot be written ({error.strerror or error}).",
            str(folder),
            "Make room and run again: finished units are kept.",
        ) from error


def _baseline(
    plan: StudyPlan, results: list[dict[str, Any]]
) -> tuple[str, list[dict[str, Any]]] | None:
    """The arm that margins are taken against, and its results."""
    arm = plan.baseline
    return None if arm is None else (arm, [r for r in results if r["arm"] == arm])


class _Work:
    """The units of one run: what the ledger holds already, and the rest through an executor."""

    def __init__(
        self,
        plan: StudyPlan,
        folder: Path,
        ledger: Ledger,
        progress: Progress | None,
        workers: int | None,
        cluster: str | None,
    ) -> None:
        self._plan = plan
        self._folder = folder
        self._ledger = ledger
        self._progress = progress
        self._workers = workers
        self._cluster = cluster
        self._resources = ExitStack()
        self._executor: Executor | None = None
        self.asked: list[Unit] = []
        self._total = 0
        self._count = 0
        self._said = False

    def __enter__(self) -> _Work:
        return self

    def __exit__(self, *_: object) -> None:
        self._resources.close()
        shutil.rmtree(self._folder / SCRATCH, ignore_errors=True)

    def run(self, units: Sequence[Unit]) -> list[dict[str, Any]]:
        """Results of the units, in their order: those of the ledger, and the rest computed."""
        known = {(u.arm.id, u.key) for u in self.asked}
        self.asked += [u for u in units if (u.arm.id, u.key) not in known]
        kept = self._ledger.finished(unit.key for unit in units)
        done = {u.key: kept[u.key] for u in units if _usable(u, kept.get(u.key))}
        self._total += len({unit.key for unit in units})
        self._count += len(done)
        if self._progress is not None and not self._said:
            self._progress(self._count, self._total, "")
            self._said = True
        waiting = {unit.key: unit for unit in units if unit.key not in done}
        _log.info("%d units are kept, %d to compute", len(done), len(waiting))
        done |= self._compute(list(waiting.values()))
        return [_labelled(done[unit.key], unit) for unit in units]

    def finished(self) -> list[dict[str, Any]]:
        """Results of those of the units asked for that are finished, in their order."""
        kept = self._ledger.finished(unit.key for unit in self.asked)
        return [_labelled(kept[u.key], u) for u in self.asked if _usable(u, kept.get(u.key))]

    def _compute(self, waiting: list[Unit]) -> dict[str, dict[str, Any]]:
        if not waiting:
            return {}
        executor = self._executor or self._open(len(waiting))
        if not isinstance(executor, InProcess):
            return self._spread(executor, waiting)
        done = {}
        for unit in waiting:
            done[unit.key] = self._note(unit, executor.submit(run_unit_here, unit).result())
        return done

    def _open(self, units: int) -> Executor:
        """The executor of this run, and the scratch its processes share."""
        workers = self._workers
        if workers is None:
            workers = fitting_workers(self._plan.scan_bytes(), units)
        _log.info("computing with %s", self._cluster or f"{workers} process(es)")
        if self._cluster is None and workers == 1:
            self._executor = self._resources.enter_context(InProcess())
            return self._executor
        for number in range(len(self._plan.scan_ids)):
            self._write_scratch(number)
        opened = pool(workers) if self._cluster is None else cluster_executor(self._cluster)
        self._executor = self._resources.enter_context(opened)
        return self._executor

    def _spread(self, executor: Executor, waiting: Sequence[Unit]) -> dict[str, dict[str, Any]]:
        """Run units on an executor; a damaged scratch is made again, once for every unit."""
        futures: dict[Future[Any], Unit] = {}
        again: list[Unit] = []
        done: dict[str, dict[str, Any]] = {}
        try:
            futures = {executor.submit(run_unit_shared, unit): unit for unit in waiting}
            for future in as_completed(futures):
                unit = futures[future]
                try:
                    done[unit.key] = self._note(unit, future.result())
                except ScratchError:
                    again.append(unit)
            for number, scan_id in enumerate(self._plan.scan_ids):
                mine = [unit for unit in again if unit.scan_id == scan_id]
                if mine:
                    self._write_scratch(number)
                for unit in mine:
                    result = executor.submit(run_unit_shared, unit).result()
                    done[unit.key] = self._note(unit, result)
        except StopAfterUnits:
            self._keep_what_is_at_work(executor, futures)
            raise
        except KeyboardInterrupt:
            end_workers(executor)
            raise
        except Exception as error:
            if not isinstance(error, BrokenExecutor) and not cluster_lost(error):
                raise
            raise StudyError(
                "A worker process was ended from outside (out of memory, or killed).",
                str(self._folder),
                "Run again to go on: finished units are kept. Fewer --workers need less memory.",
            ) from error
        finally:
            for future in futures:
                future.cancel()
        return done

    def _keep_what_is_at_work(self, executor: Executor, futures: dict[Future[Any], Unit]) -> None:
        """Wait for the units that have begun; a second stop ends their processes."""
        try:
            begun = [future for future in futures if not future.cancel()]
            for future in as_completed(begun):
                with suppress(ScratchError):
                    self._ledger.commit(futures[future].key, future.result())
        except KeyboardInterrupt:
            end_workers(executor)
            raise

    def _write_scratch(self, number: int) -> None:
        scan = self._plan.prepared(number)
        folder = self._folder / SCRATCH / self._plan.scan_ids[number]
        try:
            write_scratch(scan, folder)
        except OSError as error:
            raise StudyError(
                f"A scan cannot be laid out for the workers ({error.strerror or error}).",
                str(folder),
                "Make room (about the size of the unpacked scans) and run again, or run with "
                "--workers 1, which needs none.",
            ) from error

    def _note(self, unit: Unit, result: dict[str, Any]) -> dict[str, Any]:
        self._ledger.commit(unit.key, result)
        self._count += 1
        certificate = result["certificate"]
        _log.info(
            "unit %d: %s on %s, draw %d: %.2f s, %d iterations, weight %s%s",
            *(self._count, unit.arm.label, unit.scan_id, unit.draw, result["timing"]["unit_s"]),
            *(certificate["iterations"], certificate["weight"]),
            "" if certificate["reached"] else ", tolerance not reached",
        )
        if self._progress is not None:
            label = f"{unit.arm.label}, {unit.scan_id}, draw {unit.draw}"
            self._progress(self._count, self._total, label)
        return result


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
