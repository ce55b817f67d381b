"""What a study keeps when it is killed, disturbed or run twice."""

import json
import os
import random
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


# Enough units to be killed in five times.
LONG = PROTOCOL.replace("draws = 2", "draws = 16")


CHILD = """
import multiprocessing, sys
from mrics.study import run_study

def told(done, total, label):
    if label:
        print(*(child.pid for child in multiprocessing.active_children()), flush=True)

if __name__ == "__main__":
    run_study(sys.argv[1], sys.argv[2], workers=int(sys.argv[3]), progress=told)
"""


def kill_and_resume(folder: Path, kills: int, seed: int) -> None:
    """Kill a run some units and some milliseconds after it starts, again and again."""
    protocol = write_small_study(folder, scans=2, protocol=LONG)
    (folder / "child.py").write_text(CHILD)
    out = folder / "out"
    moment = random.Random(seed)
    kept: set[str] = set()
    for number in range(kills):
        command = [sys.executable, str(folder / "child.py"), str(protocol), str(out)]
        child = subprocess.Popen([*command, str(1 + number % 2)], stdout=subprocess.PIPE, text=True)
        finished = moment.randrange(1, 8)
        told = [child.stdout.readline() for _ in range(finished)]
        time.sleep(moment.uniform(0.0, 0.05))
        child.kill()
        child.wait()
        child.stdout.close()
        for pid in told[-1].split():
            wait_for_end(int(pid))
        with Ledger(out) as ledger:
            now = {row[0] for row in ledger._base.execute("SELECT key FROM units")}
        assert kept <= now, "a finished unit was lost"
        assert len(now) >= len(kept) + finished, "a unit was told as finished and was not kept"
        kept = now
    first: list[int] = []
    resumed = run_study(protocol, out, progress=lambda done, *_: first.append(done))
    assert first[0] == len(kept), "every finished unit is used, and only those"
    assert numbers(resumed) == numbers(run_study(protocol, folder / "whole"))


def wait_for_end(pid: int) -> None:
    """Wait until a process has ended (a zombie has)."""
    until = time.monotonic() + 60
    while time.monotonic() < until:
        try:
            state = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0]
        except OSError:
            return
        if state == "Z":
            return
        time.sleep(0.02)
    raise AssertionError(f"worker {pid} outlived its run")


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
