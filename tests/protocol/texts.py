"""Protocol texts the tests of this folder share: an invented knee protocol."""

from __future__ import annotations

KNEE_3D = """\
[protocol]
title = "Knee, 3-D proton density, faster"
question = "Can 6:43 become 3:00 and keep 1 mm cartilage defects?"

[sequence]
family = "gradient-echo-3d"
repetition_time_ms = 12
echo_time_ms = 5.0
console_scan_time_s = 403.2

[grid]
readout_axis = "i"
phase_axis = "j"
partition_axis = "k"
phase_steps = 300
partition_steps = 112

[today]
sampling = "equispaced"
acceleration = 2
recovery = "least-squares"

[[sampling]]
name = "power law"
law = "power"
exponent = 3.0
draw = "bernoulli"
acceleration = [2, 4, 6.5]
calibration = 24
elliptical = true

[[recovery]]
method = "wavelet"

[acceptance]
ssim_min = 0.95

[study]
scans = ["knee.nii.gz"]
draws = 5
seed = 20261201
"""

ANKLE_2D = """\
[sequence]
family = "turbo-spin-echo-2d"
repetition_time_ms = 2500
echo_train_length = 12
echo_spacing_ms = 9
echo_time_ms = 36
averages = 4

[grid]
phase_steps = 224
slices = 20

[[sampling]]
law = "uniform"
acceleration = 2

[[recovery]]
method = "zero-filled"

[study]
scans = "ankle.nii"
"""


def changed(text: str, old: str, new: str) -> str:
    """``text`` with one passage replaced; the passage must be there."""
    assert old in text
    return text.replace(old, new, 1)
