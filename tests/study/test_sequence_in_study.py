"""What the sequence does to a study: blur of the echo train, partial Fourier."""

from pathlib import Path

import nibabel
import numpy as np
import pytest
from small_study import PROTOCOL, small_object, write_small_study

from mrics.encoding import echo_weights
from mrics.numerics import centred_fft, centred_ifft
from mrics.protocol import load_protocol
from mrics.scan import Axes
from mrics.study import plan_study, run_study

TRAIN = """\
[protocol]
title = "Echo train"
[sequence]
family = "turbo-spin-echo-2d"
repetition_time_ms = 3000.0
echo_time_ms = 40.0
echo_train_length = 8
echo_spacing_ms = 10.0
tissue_t2_ms = 40.0
order = "linear"
[grid]
readout_axis = "i"
phase_axis = "j"
[[sampling]]
pattern = "full"
[[recovery]]
method = "zero-filled"
[acceptance]
nrmse_max = 0.5
[study]
scans = ["object_*.nii.gz"]
"""


def test_a_turbo_spin_echo_arm_shows_the_blur_of_its_train(tmp_path: Path) -> None:
    """All lines are acquired: what is lost is lost to T2 alone (Qin 2012 for its point spread)."""
    sharp = run_study(write_small_study(tmp_path / "a", 1, TRAIN), tmp_path / "a" / "out")
    assert sharp["arms"][0]["metrics"]["nrmse"]["mean"] < 1e-6
    path = write_small_study(tmp_path / "b", 1, TRAIN + "echo_train_decay = true\n")
    blurred = run_study(path, tmp_path / "b" / "out")
    assert blurred["arms"][0]["metrics"]["nrmse"]["mean"] > 0.02

    axes = Axes("i", "j")
    planes = axes.to_planes(small_object(0))
    [row] = plan_study(load_protocol(path)).rows
    weights = echo_weights(row.pattern, 10.0, 40.0)
    expected = np.abs(centred_ifft(centred_fft(planes) * weights[:, None]))
    [entry] = [m for m in blurred["maps"] if m["kind"] == "recovered"]
    stored = nibabel.load(tmp_path / "b" / "out" / entry["file"])
    found = np.abs(axes.to_planes(np.asanyarray(stored.dataobj)))
    np.testing.assert_allclose(found, expected, atol=1e-4 * expected.max())


@pytest.mark.parametrize("coils", ["", "\n[coils]\nnumber = 4\n"])
def test_partial_fourier_arms_beat_zero_filling(tmp_path: Path, coils: str) -> None:
    text = PROTOCOL[: PROTOCOL.index("[today]")] + (
        '[[sampling]]\nname = "six eighths"\npattern = "full"\npartial_fourier = 0.75\n'
        'calibration = 16\n'
        '[[recovery]]\nmethod = "zero-filled"\n[[recovery]]\nmethod = "homodyne"\n'
        '[[recovery]]\nmethod = "pocs"\n[acceptance]\nnrmse_max = 0.5\n'
        '[study]\nscans = ["object_*.nii.gz"]\n'
    )  # fmt: skip
    results = run_study(write_small_study(tmp_path, 1, text + coils), tmp_path / "out")
    error = {arm["recovery"]: arm["metrics"]["nrmse"]["mean"] for arm in results["arms"]}
    assert error["homodyne"] < 0.9 * error["zero-filled"]
    assert error["pocs"] < 0.9 * error["zero-filled"]
