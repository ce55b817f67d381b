"""Stopping a run: Ctrl-C once ends it after the units at work, twice at once."""

from __future__ import annotations

import os
import signal
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from mrics.cli.progress import Report, progress_line

_SIGNALS = (signal.SIGINT, signal.SIGTERM)
_STOPPING = b"\nmrics: stopping when the units at work are done; Ctrl-C again stops at once\n"


@contextmanager
def stoppable() -> Iterator[Report]:
    """Progress on the terminal, by a callback that stops the run after a unit on Ctrl-C.

    A second Ctrl-C raises where it strikes. An order to terminate (as batch systems send it)
    counts as a Ctrl-C.
    """
    from mrics.study.executors import StopAfterUnits

    asked = False

    def on_signal(_number: int, _frame: Any) -> None:
        nonlocal asked
        if asked:
            raise KeyboardInterrupt
        asked = True
        # Python's own stream may be in the middle of a line of progress.
        os.write(2, _STOPPING)

    before = {number: signal.signal(number, on_signal) for number in _SIGNALS}
    try:
        with progress_line() as progress:

            def report(done: int, total: int, label: str) -> None:
                progress(done, total, label)
                if asked:
                    raise StopAfterUnits

            yield report
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
