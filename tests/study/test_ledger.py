"""What a study keeps when it is killed, disturbed or run twice."""

import json
import os
import random
import signal
import sqlite3
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import pytest
from small_study import PROTOCOL, write_small_study

from mrics.errors import StudyError
from mrics.study import run_study
from mrics.study.ledger import LEDGER, LOCK, Ledger
from mrics.study.plan import plan_study
from mrics.study.scratch import ScratchError, read_scratch, write_scratch


def test_a_commit_is_there_for_the_next_run(tmp_path: Path) -> None:
    with Ledger(tmp_path) as ledger:
        ledger.commit("a", {"x": 1.23456789, "maps": []})
    with Ledger(tmp_path) as ledger:
        assert ledger.finished(["a", "b"]) == {"a": {"x": 1.234568, "maps": []}}


def test_ten_thousand_units_are_found(tmp_path: Path) -> None:
    with Ledger(tmp_path) as ledger:
        ledger._base.execute("PRAGMA synchronous = OFF")
        for n in range(10_000):
            ledger.commit(f"k{n}", {"n": n})
    with Ledger(tmp_path) as ledger:
        found = ledger.finished(f"k{n}" for n in range(10_000))
    assert len(found) == 10_000
    assert found["k77"] == {"n": 77}


def test_a_second_run_is_refused_and_told_who_is_at_work(tmp_path: Path) -> None:
    with Ledger(tmp_path), pytest.raises(StudyError, match=f"process {os.getpid()}, since"):
        Ledger(tmp_path)
    with Ledger(tmp_path):
        assert (tmp_path / LOCK).is_file()


def test_a_newer_ledger_is_refused(tmp_path: Path) -> None:
    with sqlite3.connect(tmp_path / LEDGER) as base:
        base.execute("PRAGMA user_version = 99")
    base.close()
    with pytest.raises(StudyError, match="format 99"):
        Ledger(tmp_path)


def test_a_ledger_that_is_none_is_refused_and_left(tmp_path: Path) -> None:
    (tmp_path / LEDGER).write_bytes(b"no database at all" * 100)
    with pytest.raises(StudyError, match="cannot be used"):
        Ledger(tmp_path)
    assert (tmp_path / LEDGER).read_bytes().startswith(b"no database")


def test_damaged_scratch_is_noticed(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=1)
    from mrics.protocol import load_protocol

    prepared = plan_study(load_protocol(protocol)).prepared(0)
    folder = write_scratch(prepared, tmp_path / "scratch")
    again = read_scratch(folder)
    assert (again.stack == prepared.stack).all()
    assert again.scan.shape == prepared.scan.shape
    read_scratch.cache_clear()
    content = bytearray((folder / "stack.npy").read_bytes())
    content[-5] ^= 1
    (folder / "stack.npy").write_bytes(content)
    with pytest.raises(ScratchError):
        read_scratch(folder)


def numbers(results: dict[str, Any]) -> str:
    return json.dumps({k: v for k, v in results.items() if k != "timing"}, sort_keys=True)


# A study long enough to be killed in: many units, each with a few milliseconds of work.
LONG = PROTOCOL.replace("draws = 2", "draws = 12")


def kill_and_resume(folder: Path, kills: int, seed: int) -> None:
    protocol = write_small_study(folder, scans=2, protocol=LONG)
    out = folder / "out"
    code = f"from mrics.study import run_study; run_study({str(protocol)!r}, {str(out)!r})"
    pause = random.Random(seed)
    kept: set[str] = set()
    for _ in range(kills):
        child = subprocess.Popen([sys.executable, "-c", code])
        time.sleep(pause.uniform(0.8, 2.2))
        child.send_signal(signal.SIGKILL)
        child.wait()
        if (out / LEDGER).is_file():
            with Ledger(out) as ledger:
                now = {row[0] for row in ledger._base.execute("SELECT key FROM units")}
            assert kept <= now, "a finished unit was lost"
            kept = now
    first: list[int] = []
    resumed = run_study(protocol, out, progress=lambda done, *_: first.append(done))
    assert first[0] == len(kept), "every finished unit is used, and only those"
    assert numbers(resumed) == numbers(run_study(protocol, folder / "whole"))


def test_a_killed_study_loses_no_finished_unit(tmp_path: Path) -> None:
    kill_and_resume(tmp_path, kills=2, seed=1)


def test_a_local_cluster_gives_the_same_numbers(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=1)
    alone = run_study(protocol, tmp_path / "alone")
    spread = run_study(protocol, tmp_path / "spread", cluster="local")
    assert numbers(spread) == numbers(alone)
    assert not (tmp_path / "spread" / "scratch").exists()


def test_a_cluster_that_does_not_answer_is_said_within_ten_seconds(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=1)
    started = time.monotonic()
    with pytest.raises(StudyError, match="does not answer"):
        run_study(protocol, tmp_path / "out", cluster="tcp://127.0.0.1:9")
    assert time.monotonic() - started < 10
    assert not (tmp_path / "out").exists()
