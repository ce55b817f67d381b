"""Zero-filled interpolation: the outer k-space of a finer grid is empty."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.view import ScanView
from mrics.scan.volume import LETTERS

# Natural logarithm of the power ratio across the edge.
STEP = 0.7
_WINDOW = 3
_LEAST_LENGTH = 32


def zero_filled(view: ScanView) -> tuple[Finding, ...]:
    """A step down in the power of k-space along an axis, at the edge of the acquired matrix."""
    findings = []
    for axis in view.encoded:
        length = view.volume.shape[axis]
        if length < _LEAST_LENGTH:
            continue
        power = view.power(axis)
        centre = length // 2
        up, last_up = _largest_step(power[centre:])
        down, last_down = _largest_step(power[centre::-1])
        if min(up, down) > STEP and abs(last_up - last_down) <= 2:
            true = last_up + last_down + 1
            findings.append(_finding(LETTERS[axis], length, true, min(up, down)))
    return tuple(findings)


def _largest_step(power: NDArray[np.float64]) -> tuple[float, int]:
    """Largest fall of log power from one sample to all further out, beyond the trend before it.

    Returns the fall and the index of the last sample before it.
    """
    level = np.log(power + power.max() * 1e-16 + np.finfo(np.float64).tiny)
    best, last = 0.0, len(level) - 1
    for k in range(int(0.4 * len(level)), len(level) - _WINDOW):
        inner = level[k - _WINDOW + 1 : k + 1]
        step = float(inner.min() - level[k + 1 :].max() - max(inner[0] - inner[-1], 0.0))
        if step > best:
            best, last = step, k
    return best, last


def _finding(letter: str, length: int, true: int, step: float) -> Finding:
    return Finding(
        code="zero-filled",
        what=f"Outer k-space along {letter} is empty: about {true} of {length} samples were "
        f"measured (power falls by {10 * step / np.log(10):.0f} dB at the edge).",
        where=f"axis {letter}",
        statistic=step,
        threshold=STEP,
        bias="A pattern drawn on the padded grid spends samples on k-space that is known to be "
        "empty, so the acceleration of the measured part is smaller than stated.",
        advice=f"Crop k-space along {letter} to {true} samples before the study.",
        remedy="crop_kspace",
        settings=((letter, true),),
    )
