"""The study engine against the work it organises: printed, not asserted.

Beside wall times stand CPU seconds of all processes: on a machine that others use, two processes
get no second core, and what the engine allows is then told by the work that only one process does.
"""

import json
import subprocess
import sys
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
#: what the machine gives two processes that share nothing: FFTs of a plane in cache
BARE = """
import multiprocessing, time
import numpy as np
import scipy.fft

def work(times):
    x = np.ones((256, 256), np.complex64)
    started = time.perf_counter()
    for _ in range(times):
        x = scipy.fft.ifft2(scipy.fft.fft2(x))
    return time.perf_counter() - started

if __name__ == "__main__":
    work(50)
    alone = work(1000)
    with multiprocessing.get_context("fork").Pool(2) as pool:
        print(2 * alone / max(pool.map(work, [1000, 1000], chunksize=1)))
"""
CODE = """
import resource, sys, time
from mrics.numerics import set_threads
from mrics.study import run_study

def used(who):
    state = resource.getrusage(who)
    return state.ru_utime + state.ru_stime

set_threads(1)
started = time.perf_counter()
run_study(sys.argv[1], sys.argv[2], workers=int(sys.argv[3]))
print(time.perf_counter() - started, used(resource.RUSAGE_SELF), used(resource.RUSAGE_CHILDREN))
"""


def measured(protocol: Path, out: Path, workers: int) -> tuple[float, float, float]:
    """Wall seconds, CPU seconds of the main process (imports included), and of the workers."""
    command = [sys.executable, "-c", CODE, str(protocol), str(out), str(workers)]
    done = subprocess.run(command, check=True, capture_output=True, text=True)
    wall, main, children = (float(x) for x in done.stdout.split())
    return wall, main, children


def test_two_processes_against_one(tmp_path: Path, figure) -> None:
    protocol = write_small_study(tmp_path, 2, TEXT, (192, 160, 24))
    run_study(protocol, tmp_path / "warm", quick=True)
    runs = {workers: measured(protocol, tmp_path / f"by{workers}", workers) for workers in (1, 2)}
    timing = json.loads((tmp_path / "by1" / "results.json").read_text())["timing"]
    units = sum(u["unit_s"] for u in timing["units"])
    recoveries = sum(u["recovery_s"] for u in timing["units"])
    bare = subprocess.run([sys.executable, "-c", BARE], check=True, capture_output=True, text=True)
    figure("the same FFTs in two processes and in one, nothing shared", f"{float(bare.stdout):.2f}")
    (wall, alone, _), (wall_of_two, main, workers) = runs[1], runs[2]
    figure(
        f"{len(timing['units'])} units, two processes against one, wall",
        f"{wall / wall_of_two:.2f} ({wall:.1f} s, {wall_of_two:.1f} s)",
        "1.8 on two free cores",
    )
    figure(
        "the same from CPU seconds: all of one process / (main process + half of the workers)",
        f"{alone / (main + workers / 2):.2f} ({alone:.1f} s; {main:.1f} s, {workers:.1f} s)",
        "1.8",
    )
    figure(
        "time outside units (scans prepared and inspected, plan, results) / recoveries",
        f"{(timing['study_s'] - units) / recoveries:.3f}",
        "0.05",
    )


def test_overhead_of_the_engine(tmp_path: Path, figure) -> None:
    """Time outside units that grows with them: 62 units less 8 units of the same study."""
    outside, recoveries = {}, {}
    for draws in (1, 10):
        folder = tmp_path / str(draws)
        text = TEXT.replace("draws = 10", f"draws = {draws}")
        protocol = write_small_study(folder, 2, text, (192, 160, 24))
        run_study(protocol, folder / "out")
        timing = json.loads((folder / "out" / "results.json").read_text())["timing"]
        units = [u["unit_s"] for u in timing["units"]]
        outside[draws] = timing["study_s"] - sum(units)
        recoveries[draws] = sum(u["recovery_s"] for u in timing["units"])
    grown = (outside[10] - outside[1]) / (recoveries[10] - recoveries[1])
    figure("engine's time per unit / recovery's", f"{grown:.3f}", "0.05")


def test_a_ledger_of_ten_thousand_units(tmp_path: Path, figure) -> None:
    result = {"slices": [{"nrmse": 0.1}] * 16}
    with Ledger(tmp_path) as ledger:
        ledger._base.execute("PRAGMA synchronous = OFF")
        for n in range(10_000):
            ledger.commit(f"{n:024d}", result)
    started = time.perf_counter()
    with Ledger(tmp_path) as ledger:
        opened = time.perf_counter() - started
        ledger.finished(f"{n:024d}" for n in range(10_000))
    whole = time.perf_counter() - started
    figure("ledger of 10,000 units: opened", f"{opened:.3f} s", "1 s")
    figure("the same: opened and every unit read", f"{whole:.2f} s")
