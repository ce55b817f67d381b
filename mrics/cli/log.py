"""The log of ``--verbose``: what is done and when, on the terminal."""

from __future__ import annotations

import logging
import platform
import sys


def log_to_terminal() -> None:
    """Write what rooms log to standard error, each line with the seconds since the start.

    Scans are named by their label; nothing of a header but its numbers is logged.
    """
    import mrics

    handler = logging.StreamHandler(sys.stderr)
    handler.setFormatter(_Seconds("%(seconds)8.2f s  %(message)s"))
    log = logging.getLogger("mrics")
    log.addHandler(handler)
    log.setLevel(logging.INFO)
    log.info("mrics %s, Python %s", mrics.__version__, platform.python_version())


class _Seconds(logging.Formatter):
    def format(self, record: logging.LogRecord) -> str:
        record.seconds = record.relativeCreated / 1000
        return super().format(record)
