"""Progress of a study on the terminal: a bar with the time left, plain lines elsewhere."""

from __future__ import annotations

import logging
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

Report = Callable[[int, int, str], None]


@contextmanager
def progress_line(what: str = "units") -> Iterator[Report]:
    """A progress callback: a bar on a terminal, a line every tenth elsewhere or among a log."""
    if not sys.stderr.isatty() or logging.getLogger("mrics").isEnabledFor(logging.INFO):
        yield _Lines(what)
        return
    from rich.console import Console
    from rich.progress import (
        BarColumn,
        MofNCompleteColumn,
        Progress,
        TextColumn,
        TimeElapsedColumn,
        TimeRemainingColumn,
    )

    bar = Progress(
        TextColumn(what),
        BarColumn(),
        MofNCompleteColumn(),
        TimeElapsedColumn(),
        TextColumn("left"),
        TimeRemainingColumn(),
        TextColumn("{task.description}"),
        console=Console(stderr=True),
    )
    with bar:
        task = bar.add_task("reading scans", total=None)

        def report(done: int, total: int, label: str) -> None:
            bar.update(task, completed=done, total=total, description=label)

        yield report


class _Lines:
    """One line at the start and at every tenth of the units, with an estimate of the time left."""

    def __init__(self, what: str) -> None:
        self._what = what
        self._started: float | None = None
        self._kept = 0
        self._next = 0.0

    def __call__(self, done: int, total: int, label: str) -> None:
        now = time.monotonic()
        if self._started is None:
            self._started, self._kept = now, done
            kept = f", {done} kept from an earlier run" if done else ""
            print(f"{total} {self._what}{kept}", file=sys.stderr, flush=True)
            self._next = done + max(1.0, (total - done) / 10)
            return
        if done < self._next and done < total:
            return
        self._next = done + max(1.0, (total - self._kept) / 10)
        rate = (now - self._started) / max(1, done - self._kept)
        left = round(rate * (total - done))
        print(
            f"{done}/{total} {self._what}, {left // 60}:{left % 60:02d} left ({label})",
            file=sys.stderr,
            flush=True,
        )
