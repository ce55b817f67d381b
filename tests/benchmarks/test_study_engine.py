"""The study engine against the work it organises: printed, not asserted.

``python -m pytest -s tests/benchmarks/test_study_engine.py``
"""

import json
import time
from pathlib import Path

from small_study import PROTOCOL, write_small_study

from mrics.study import run_study
from mrics.study.ledger import Ledger

# 2 scans x (3 accelerations x 10 draws + today's pattern) = 62 units of 24 planes of 192 x 160.
TEXT = (
    PROTOCOL.replace("[2, 3]", "[2, 3, 4]\nbest_of = 1")
    .replace("calibration = 8\n[[recovery]]", "calibration = 16\n[[recovery]]")
    .replace("draws = 2", "draws = 10")
    .replace('[[recovery]]\nmethod = "zero-filled"', '[[recovery]]\nmethod = "wavelet"')
)


def test_two_processes_against_one(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, 2, TEXT, (192, 160, 24))
    run_study(protocol, tmp_path / "warm", quick=True)
    walls = {}
    for workers in (1, 2):
        out = tmp_path / f"by{workers}"
        started = time.perf_counter()
        code = (
            "from mrics.numerics import set_threads; from mrics.study import run_study; "
            f"set_threads(1); run_study({str(protocol)!r}, {str(out)!r}, workers={workers})"
        )
        import subprocess
        import sys

        subprocess.run([sys.executable, "-c", code], check=True)
        walls[workers] = time.perf_counter() - started
    timing = json.loads((tmp_path / "by1" / "results.json").read_text())["timing"]
    units = sum(u["unit_s"] for u in timing["units"])
    recoveries = sum(u["recovery_s"] for u in timing["units"])
    print(
        f"\n{len(timing['units'])} units; one process, one thread {walls[1]:.1f} s, two processes "
        f"{walls[2]:.1f} s: {walls[1] / walls[2]:.2f} x"
    )
    print(
        f"inside one process: study {timing['study_s']:.2f} s, units {units:.2f} s, recoveries "
        f"{recoveries:.2f} s; outside units {100 * (timing['study_s'] - units) / recoveries:.1f} % "
        "of the recoveries"
    )


def test_a_ledger_of_ten_thousand_units(tmp_path: Path) -> None:
    with Ledger(tmp_path) as ledger:
        ledger._base.executemany(
            "INSERT INTO units VALUES (?, '', ?)",
            [(f"{n:024d}", json.dumps({"slices": [{"nrmse": 0.1}] * 16})) for n in range(10_000)],
        )
        ledger._base.commit()
    started = time.perf_counter()
    with Ledger(tmp_path) as ledger:
        opened = time.perf_counter() - started
        ledger.finished(f"{n:024d}" for n in range(10_000))
    print(
        f"\nledger of 10,000 units: opened in {opened:.3f} s, all read in "
        f"{time.perf_counter() - started:.2f} s"
    )
