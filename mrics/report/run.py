"""A study from protocol to page."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from mrics.protocol import Protocol


def run_study(protocol: Protocol | str | Path, out: str | Path, **settings: Any) -> dict[str, Any]:
    """Run a study and draw its page.

    Parameters
    ----------
    protocol : Protocol, str or Path
        The protocol or its file.
    out : str or Path
        Study folder; ``report.html`` is written into it beside the results.
    **settings
        As :func:`mrics.study.run_study` takes them: ``quick``, ``force``, ``workers``,
        ``progress``.

    Returns
    -------
    dict
        What ``results.json`` holds.
    """
    from mrics import study
    from mrics.report.page import write_report

    results = study.run_study(protocol, out, **settings)
    write_report(out)
    return results
