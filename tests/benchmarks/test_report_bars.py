"""Drawing the report of 3 scans x 6 arms x 24 slices of 256 x 256, and scrolling it.

Run with ``pytest tests/benchmarks/test_report_bars.py -s``; figures are printed. Times are bars of
the report itself on 2 cores: drawing under 20 s and 1 GiB, page under 25 MB with every slice,
opening under 2 s, 30 drawings a second or more at four panels.
"""

import json
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

sys.path.insert(0, str(Path(__file__).parents[1] / "report"))
from browsing import Page, open_browser
from study_building import StudyPlan, build_study

ARMS = (
    (2.0, "zero-filled"),
    (2.0, "windowed"),
    (3.0, "windowed"),
    (4.0, "windowed"),
    (6.0, "windowed"),
    (8.0, "zero-filled"),
)
DRAW = """
import json, resource, sys, time
started = time.perf_counter()
from mrics.report import write_report
page = write_report(sys.argv[1])
seconds = time.perf_counter() - started
used = resource.getrusage(resource.RUSAGE_SELF)
peak, cpu = used.ru_maxrss / 1024, used.ru_utime + used.ru_stime
print(json.dumps({"s": seconds, "cpu_s": cpu, "MiB": peak, "MB": page.stat().st_size / 1e6}))
"""
SCROLL = """
const done = arguments[arguments.length - 1];
const slider = document.getElementById("v-slice");
const stage = document.getElementById("v-stage");
let drawn = 0;
new MutationObserver((list) => { drawn += list.filter(() => stage.dataset.painted).length; })
  .observe(stage, { attributes: true, attributeFilter: ["data-painted"] });
let turn = 0;
const started = performance.now();
const step = () => {
  const passed = performance.now() - started;
  if (passed > 3000) {
    done([1000 * drawn / passed, stage.querySelectorAll("canvas").length]);
    return;
  }
  turn += 1;
  slider.value = turn % 24;
  slider.dispatchEvent(new Event("input"));
  requestAnimationFrame(step);
};
step();
"""


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    plan = StudyPlan(shape=(24, 256, 256), scans=3, draws=1, arms=ARMS)
    return build_study(tmp_path_factory.mktemp("bars"), plan)


@pytest.fixture(scope="module")
def browser() -> Iterator[Any]:
    opened = open_browser()
    yield opened
    opened.quit()


def test_drawing_the_report(study: Path, figure: Any) -> None:
    run = subprocess.run(
        [sys.executable, "-c", DRAW, str(study)], capture_output=True, text=True, check=True
    )
    figures = json.loads(run.stdout)
    name = "report of 3 scans x 6 arms x 24 slices of 256 x 256"
    figure(f"{name}: drawing", f"{figures['s']:.1f} s ({figures['cpu_s']:.1f} s CPU)", "20 s")
    figure(f"{name}: memory", f"{figures['MiB']:.0f} MiB", "1024 MiB")
    figure(f"{name}: page", f"{figures['MB']:.2f} MB", "25 MB")
    assert "slices are in this page" not in (study / "report.html").read_text()


@pytest.mark.browser
def test_opening_and_scrolling(study: Path, browser: Any, figure: Any) -> None:
    started = time.perf_counter()
    page = Page(browser, study / "report.html", 1600, 1000)
    opened = time.perf_counter() - started
    rates = {}
    for other in ("", ARMS[3]):
        page.choose("#v-other", f"power-r{other[0]:g}-{other[1]}" if other else "")
        rate, panels = browser.execute_async_script(SCROLL)
        rates[panels] = rate
    figure("opening that page", f"{opened:.2f} s", "2 s")
    for panels, rate in rates.items():
        figure(f"scrolling it, {panels} panels", f"{rate:.0f} drawings a second", "30")
