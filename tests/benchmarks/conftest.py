"""Collects the figures of a benchmark run and prints them as one table of ratios.

``pytest tests/benchmarks`` runs one benchmark at a time; with ``--write-table`` the table also
replaces the one in DEVELOPERS.md.
"""

from __future__ import annotations

import os
import platform
from pathlib import Path

import pytest

ROWS = pytest.StashKey[list[tuple[str, str, str]]]()
GUIDE = Path(__file__).parents[2] / "DEVELOPERS.md"
BEGIN, END = "<!-- benchmarks -->", "<!-- end of benchmarks -->"


def pytest_addoption(parser):
    parser.addoption(
        "--write-table", action="store_true", help="Put the table of ratios into DEVELOPERS.md."
    )


@pytest.hookimpl(tryfirst=True)
def pytest_cmdline_main(config):
    # Two benchmarks at a time would measure each other.
    config.option.numprocesses = None
    config.option.dist = "no"
    config.stash[ROWS] = []


@pytest.fixture
def figure(request):
    """``figure(name, value, bar)`` adds a row to the table; nothing is asserted."""
    rows = request.config.stash[ROWS]

    def add(name: str, value: str, bar: str = "") -> None:
        rows.append((name, value, bar))

    return add


def pytest_terminal_summary(terminalreporter, config):
    rows = config.stash.get(ROWS, [])
    if not rows:
        return
    lines = ["| measured | figure | aim |", "| --- | --- | --- |"]
    lines += [f"| {name} | {value} | {bar} |" for name, value, bar in rows]
    lines.append(
        f"\nPython {platform.python_version()}, {platform.machine()}, {os.cpu_count()} cores."
    )
    text = "\n".join(lines)
    terminalreporter.section("figures")
    terminalreporter.write_line(text)
    if config.getoption("write_table"):
        guide = GUIDE.read_text(encoding="utf-8")
        head, rest = guide.split(BEGIN)
        tail = rest.split(END)[1]
        GUIDE.write_text(f"{head}{BEGIN}\n{text}\n{END}{tail}", encoding="utf-8")
