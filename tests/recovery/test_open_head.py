"""Recoveries on an open head volume: what shifts, variation and a known phase gain.

Volume G of ``open_volumes``: axial slices 30 to 59, a smooth phase multiplied in (the scan is a
magnitude), noise 1 % of the maximum. Patterns: power law, exponent 2 with 20 central lines at R = 3
(1-D), exponent 3 with 24 x 24 at R = 4 (2-D). The full table is in tests/campaigns.
"""

import nibabel
import numpy as np
import pytest
from open_volumes import open_volume

from mrics.encoding import undersample
from mrics.quality import score
from mrics.recovery import recover
from mrics.sampling import draw_pattern

SLICES = range(30, 60)


def head(slices=SLICES, phase_axis="j"):
    """Slices (plane, u, v) with u the phase axis, and their maximum over the whole volume."""
    volume = np.asarray(nibabel.load(open_volume("G")).dataobj, np.float32)
    stack = volume[:, :, list(slices)].transpose(2, 0, 1)
    if phase_axis == "j":
        stack = stack.transpose(0, 2, 1)
    y, x = np.mgrid[-1 : 1 : stack.shape[1] * 1j, -1 : 1 : stack.shape[2] * 1j]
    phase = np.exp(1j * (0.8 * x + 0.6 * y + 0.9 * x * y + 0.5 * y**2))
    return np.ascontiguousarray(stack), (stack * phase).astype(np.complex64), float(volume.max())


def acquired(axes, slices=SLICES, phase_axis="j", calibration=None):
    """Reference magnitude and acquisition of a 1-D (R = 3) or 2-D (R = 4) pattern."""
    reference, image, largest = head(slices, phase_axis)
    pattern = draw_pattern(
        image.shape[1 : 1 + axes],
        law="power",
        exponent=1 + axes,
        acceleration=2 + axes,
        calibration=calibration or (20 if axes == 1 else 24),
        seed=1,
    )
    return np.abs(reference), undersample(image, pattern, sigma=0.01 * largest, seed=7)


@pytest.mark.parametrize("axes", [1, 2])
def test_shifts_and_variation_gain(axes):
    """Every tenth slice: all shifts beat one fixed transform by 0.7 dB, variation gains more."""
    reference, acquisition = acquired(axes, SLICES[::10])
    found = {}
    for name, method, settings in (
        ("zero-filled", "zero-filled", {}),
        ("plain", "wavelet", {"shift": "none", "weight": 0.5}),
        ("shifts", "wavelet", {"shift": "random", "weight": 0.2}),
        ("variation", "variation", {"weight": 0.2}),
        ("smooth phase", "variation", {"weight": 0.2, "phase": "smooth"}),
    ):
        image = recover(acquisition, method, **settings).image
        found[name] = score(np.abs(image), reference)["psnr"]
    assert found["shifts"] > found["plain"] + 0.7
    assert found["variation"] > found["zero-filled"] + 1.0
    assert found["smooth phase"] > found["variation"] + 0.5
