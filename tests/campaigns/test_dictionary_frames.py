"""Frames stacked in one patch against frame by frame: volume E, slice 1, its first 8 frames.

Six frames without and two with diffusion weighting, the same complementary patterns for both.
"""

import sys
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parents[1] / "recovery"))
from dictionary_cases import PATTERNS, acquired, judged, planes_of

FRAMES = 8


@pytest.mark.slow
def test_joint_frames_gain_at_least_one_decibel() -> None:
    planes = planes_of("E", [1], FRAMES)
    gains = []
    for pattern in PATTERNS:
        data = acquired(planes, pattern, frames=FRAMES)
        alone = judged(data, planes, "dictionary")
        together = judged(data, planes, "dictionary", joint=True)
        print(
            f"\n{pattern}: frame by frame {alone['psnr']:.2f} dB, joint {together['psnr']:.2f} dB"
        )
        change = np.subtract(together["each"], alone["each"])
        print("  by frame:", " ".join(f"{value:+.1f}" for value in change))
        gains.append(together["psnr"] - alone["psnr"])
    assert min(gains) >= 1.0
