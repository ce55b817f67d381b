"""Where units are computed: in this process, in a pool of processes, or on a cluster."""

from __future__ import annotations

import multiprocessing
import os
import signal
from collections.abc import Callable, Iterator
from concurrent.futures import CancelledError, Executor, Future, ProcessPoolExecutor
from contextlib import contextmanager
from threading import Thread
from typing import Any

from mrics.errors import StudyError
from mrics.numerics import set_threads, threads
from mrics.numerics.memory import available_memory

# A unit holds the reference, k-space, its un-centred block, the image and the maps.
_COPIES_OF_A_SCAN = 8
_PROCESS_BYTES = 300 * 2**20
# How long a scheduler may take to answer; with the rest of a start it stays under 10 s.
TIMEOUT_S = 5.0


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


def pool(workers: int) -> Executor:
    """A pool of processes with one compute thread each; Ctrl-C is left to the parent."""
    return ProcessPoolExecutor(
        workers,
        mp_context=multiprocessing.get_context("spawn"),
        initializer=_start_worker,
    )


class StopAfterUnits(KeyboardInterrupt):
    """Raised by a progress callback: the units at work are finished and kept, then the run ends."""


def end_workers(executor: Executor) -> None:
    """End a pool's processes without waiting for their units."""
    processes: dict[int, Any] = getattr(executor, "_processes", None) or {}
    for process in list(processes.values()):
        process.terminate()


def _start_worker() -> None:
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    set_threads(1)
    Thread(target=_end_with_parent, daemon=True).start()


def _end_with_parent() -> None:
    """End this process when its parent does: a killed run must leave no workers behind."""
    parent = multiprocessing.parent_process()
    if parent is not None:
        parent.join()
        os._exit(1)


def check_cluster(address: str) -> None:
    """See that the package is there and that a scheduler answers; nothing is started.

    Raises
    ------
    StudyError
        As :func:`cluster_executor`.
    """
    try:
        from distributed import Client
    except ImportError as error:
        raise StudyError(
            "The package distributed, which a cluster needs, is not installed.",
            "--cluster",
            "Install it with: pip install 'mrics[cluster]'.",
        ) from error
    if address != "local":
        with _answering(address):
            Client(address, timeout=TIMEOUT_S).close()


@contextmanager
def _answering(address: str) -> Iterator[None]:
    try:
        yield
    except (OSError, ValueError) as error:
        raise StudyError(
            f"The cluster {address!r} does not answer within {TIMEOUT_S:g} s.",
            "--cluster",
            "Check the scheduler's address (tcp://host:port) and that it runs.",
        ) from error


def cluster_lost(error: BaseException) -> bool:
    """Whether an error says that workers or the scheduler of a cluster are gone."""
    return type(error).__module__.partition(".")[0] == "distributed" or isinstance(
        error, CancelledError
    )


@contextmanager
def cluster_executor(address: str) -> Iterator[Executor]:
    """An executor on a Dask cluster.

    Parameters
    ----------
    address : str
        ``tcp://host:port`` of a scheduler, or ``local`` for one made here with a worker per core.

    Raises
    ------
    StudyError
        Where the package ``distributed`` is missing or the address does not answer.
    """
    check_cluster(address)
    from distributed import Client, LocalCluster

    local = None
    with _answering(address):
        if address == "local":
            local = LocalCluster(n_workers=threads(), threads_per_worker=1, dashboard_address=None)
        client = Client(local or address, timeout=TIMEOUT_S)
    try:
        client.run(set_threads, 1)
        yield client.get_executor(pure=False)
    finally:
        client.close()
        if local is not None:
            local.close()


def fitting_workers(scan_bytes: int, units: int) -> int:
    """Processes that the cores, the units and the free memory allow; at least one."""
    need = _PROCESS_BYTES + _COPIES_OF_A_SCAN * scan_bytes
    return max(1, min(threads(), units, int(available_memory() * 0.8) // need))
