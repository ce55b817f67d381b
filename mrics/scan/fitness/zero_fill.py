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
        step, half = _largest_step(_folded(view.power(axis)))
        if step > STEP:
            findings.append(_finding(LETTERS[axis], length, min(2 * half, length), step))
    return tuple(findings)


def _folded(power: NDArray[np.float64]) -> NDArray[np.float64]:
    """Mean of +k and -k, for k = 0 ... (N-1)//2."""
    centre = len(power) // 2
    reach = (len(power) - 1) // 2
    up = power[centre : centre + reach + 1]
    down = power[centre - reach : centre + 1][::-1]
    return (up + down) / 2


def _largest_step(folded: NDArray[np.float64]) -> tuple[float, int]:
    """Largest fall of log power between two windows, beyond their own trends, and its place."""
    floor = folded.max() * 1e-16 + np.finfo(np.float64).tiny
    level = np.log(folded + floor)
    best, edge = 0.0, len(level)
    for k in range(len(level) // 2, len(level) - _WINDOW):
        inner, outer = level[k - _WINDOW : k], level[k + 1 : k + 1 + _WINDOW]
        trend = max(inner[0] - inner[-1], 0.0) + max(outer[0] - outer[-1], 0.0)
        step = float(inner.mean() - outer.mean() - trend)
        if step > best:
            best, edge = step, k
    return best, edge


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
