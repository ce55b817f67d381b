"""Ghosts of the body in air, and a body that reaches the border along a phase axis."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from mrics.numerics import circular_correlation
from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.view import ScanView
from mrics.scan.volume import LETTERS

# Amplitude of a ghost as a share of the body.
GHOST = 0.03
# Times the median over all shifts: smooth leakage into air is the same at every shift.
PEAK = 1.4
# Share of a border plane that lies in the body.
BORDER = 0.02
_NEAREST = 0.25
_MOST_PLANES = 48


def ghosting(view: ScanView) -> tuple[Finding, ...]:
    """Power in air that follows the body shifted along a phase-encoding axis.

    For every shift, the power in air above 2 sigma^2 is regressed on the body's power that many
    voxels away; the slope is the square of the ghost's amplitude. Shifts below a quarter of the
    axis are left out (ringing and blur).
    """
    findings = []
    for letter in (view.axes.phase, view.axes.partition):
        if letter is None:
            continue
        found = _ghost(view, LETTERS.index(letter))
        if found is not None:
            findings.append(_ghost_finding(letter, *found))
    return tuple(findings)


def _ghost(view: ScanView, axis: int) -> tuple[float, int] | None:
    near = ndimage.binary_dilation(view.mask, iterations=4)
    across = 2 if axis != 2 else 0
    step = max(1, view.volume.shape[across] // _MOST_PLANES)
    index: list[Any] = [slice(None)] * 3
    index[across] = slice(None, None, step)
    magnitude = view.magnitude[tuple(index)].astype(np.float64)
    body = np.where(view.mask[tuple(index)], magnitude**2, 0.0)
    air = ~near[tuple(index)] & (magnitude > 0)
    sigma = view.noise.sigma
    above = np.where(air, magnitude**2 - 2 * sigma**2, 0.0)
    slope = _slopes(above, body, air, axis)
    if slope is None:
        return None
    at = int(np.argmax(slope))
    typical = float(np.median(slope[slope != 0])) if slope.any() else 0.0
    amplitude = float(np.sqrt(max(slope[at], 0.0)))
    if amplitude < GHOST or slope[at] < PEAK * typical:
        return None
    return amplitude, at


def _slopes(
    above: NDArray[np.float64], body: NDArray[np.float64], air: NDArray[np.bool_], axis: int
) -> NDArray[np.float64] | None:
    weight = circular_correlation(air.astype(np.float64), body**2, axis)
    if weight.max() <= 0:
        return None
    product = circular_correlation(above, body, axis)
    length = above.shape[axis]
    shift = np.minimum(np.arange(length), length - np.arange(length))
    enough = (weight > 0.02 * float((body**2).sum())) & (shift >= _NEAREST * length)
    return np.where(enough, product / np.where(enough, weight, 1.0), 0.0)


def _ghost_finding(letter: str, amplitude: float, shift: int) -> Finding:
    return Finding(
        code="ghosting",
        what=f"Air holds a copy of the body shifted by {shift} voxels along {letter}, with "
        f"{amplitude:.0%} of its amplitude.",
        where=f"axis {letter}",
        statistic=amplitude,
        threshold=GHOST,
        bias="The ghost is part of the reference: a method that removes it is scored as wrong, and "
        "one that keeps aliasing as right.",
        advice="Use a scan without motion or phase errors, or judge by a region clear of ghosts.",
    )


def wrapped(view: ScanView) -> tuple[Finding, ...]:
    """The body reaches the border planes of the phase axis, so it is cut or folded over."""
    letter = view.axes.phase
    axis = LETTERS.index(letter)
    ends = [float(np.take(view.mask, end, axis=axis).mean()) for end in (0, -1)]
    if max(ends) <= BORDER:
        return ()
    return (
        Finding(
            code="wrap",
            what=f"The body fills {max(ends):.0%} of a border plane along {letter}, the phase "
            "axis: it may be folded over or cut.",
            where=f"border of axis {letter}",
            statistic=max(ends),
            threshold=BORDER,
            bias="There is no air for aliasing to fall into, and folded tissue counts as truth.",
            advice="Check the image for fold-over; use a field of view that holds the body.",
        ),
    )
