"""Ctrl-C while several processes compute: once keeps the units at work, twice ends them."""

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from small_study import PROTOCOL, write_small_study

sys.path.insert(0, str(Path(__file__).parents[1] / "cli"))
from test_operation import COMMAND, ENDLESS, environment, until

pytestmark = pytest.mark.slow


@pytest.mark.parametrize("times", [1, 2])
def test_a_pool_is_stopped(tmp_path: Path, times: int) -> None:
    text = PROTOCOL.replace("draws = 2", "draws = 60") if times == 1 else ENDLESS
    protocol = write_small_study(tmp_path, scans=1, protocol=text)
    out = tmp_path / "o"
    command = [*COMMAND, "run", str(protocol), "--out", str(out), "--workers", "2"]
    child = subprocess.Popen(
        command, stderr=subprocess.PIPE, text=True, env=environment(), start_new_session=True
    )
    until(child, " left ")
    # As a terminal does, to every process of the group.
    for _ in range(times):
        os.killpg(child.pid, signal.SIGINT)
        time.sleep(2)
    assert child.stderr is not None
    rest = child.stderr.read()
    child.stderr.close()
    assert child.wait() == 130, rest
    assert "Traceback" not in rest
    units = len(json.loads((out / "results.json").read_text())["units"])
    assert units >= 1
    assert not (out / "scratch").exists()
    # The helper of Python's pool ends by itself a moment later.
    for _ in range(100):
        left = subprocess.run(["pgrep", "-g", str(child.pid)], capture_output=True, text=True)
        if not left.stdout.strip():
            return
        time.sleep(0.1)
    pytest.fail(f"processes are left behind: {left.stdout}")
