"""The signed-error map: perceptually even, centred, and readable without red-green vision."""

import numpy as np
from skimage.color import deltaE_ciede2000, rgb2lab

from mrics.report.colours import signed_table

# Machado, Oliveira, Fernandes 2009 (IEEE TVCG 15), severity 1.0, linear RGB; from memory, rows
# sum to one as the paper's do.
PROTAN = np.array(
    [
        [0.152286, 1.052583, -0.204868],
        [0.114503, 0.786281, 0.099216],
        [-0.003882, -0.048116, 1.051998],
    ]
)
DEUTAN = np.array(
    [
        [0.367322, 0.860646, -0.227968],
        [0.280085, 0.672501, 0.047413],
        [-0.011820, 0.042940, 0.968881],
    ]
)


def _lab(table: np.ndarray) -> np.ndarray:
    return rgb2lab(table[None] / 255.0)[0]


def test_zero_is_the_lightest_and_neutral() -> None:
    lab = _lab(signed_table())
    assert lab[:, 0].argmax() == 127
    assert np.hypot(*lab[127, 1:]) < 1.0


def test_steps_look_equal_by_ciede2000() -> None:
    """CIE colour difference (scikit-image) of successive colours, both sides alike."""
    lab = _lab(signed_table())
    steps = deltaE_ciede2000(lab[:-8:8], lab[8::8])
    assert steps.max() < 1.8 * steps.min()
    assert np.allclose(lab[:127, 0], lab[:127:-1, 0], atol=2.0)


def test_both_signs_stay_apart_for_colour_blind_readers() -> None:
    linear = (signed_table() / 255.0) ** 2.2
    for matrix in (PROTAN, DEUTAN):
        seen = np.clip(linear @ matrix.T, 0, 1) ** (1 / 2.2)
        lab = rgb2lab(seen[None])[0]
        assert deltaE_ciede2000(lab[0], lab[-1]) > 30
        assert deltaE_ciede2000(lab[63], lab[-64]) > 15
