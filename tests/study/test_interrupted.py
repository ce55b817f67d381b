"""An interrupted run leaves results of what it finished, and says how much is missing."""

import json
from collections.abc import Callable
from pathlib import Path

import pytest
from small_study import write_small_study

from mrics.report import write_report
from mrics.study import run_study


class Stopped(Exception):
    """Raised by a test in the place of a person who stops the run."""


def stop_after(count: int) -> Callable[[int, int, str], None]:
    def progress(done: int, total: int, label: str) -> None:
        if label and done >= count:
            raise Stopped

    return progress


def test_interrupted_run_can_be_looked_at_and_gone_on_with(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path)
    out = tmp_path / "out"
    with pytest.raises(Stopped):
        run_study(protocol, out, progress=stop_after(3))
    partial = json.loads((out / "results.json").read_text())
    assert len(partial["units"]) == 3
    assert partial["units_planned"] > 3
    bare = [arm for arm in partial["arms"] if not arm["metrics"]]
    assert bare
    assert all(arm["verdict"]["status"] == "undecided" for arm in bare)
    page = write_report(out).read_text()
    assert f"3 of {partial['units_planned']} units are done" in page
    assert "Nothing yet of: " in page
    assert f"{bare[0]['label']} on " in page
    whole = run_study(protocol, out)
    assert len(whole["units"]) == partial["units_planned"]
    assert "units_planned" not in whole
    assert whole["units"][:1] == partial["units"][:1]
    assert "Not finished" not in write_report(out).read_text()


def test_run_that_finished_nothing_leaves_no_results(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path)

    def progress(done: int, total: int, label: str) -> None:
        raise Stopped

    with pytest.raises(Stopped):
        run_study(protocol, tmp_path / "out", progress=progress)
    assert not (tmp_path / "out" / "results.json").exists()
