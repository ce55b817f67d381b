"""Ghosts of the body in air, and a body that reaches the border along a phase axis."""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy

from mrics.numerics import circular_correlation
from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.view import ScanView
from mrics.scan.volume import LETTERS

# Amplitude of a ghost as a share of the body, and how many standard errors its square must be.
GHOST = 0.025
CERTAIN = 6.0
# Share of a border plane that lies in the body.
BORDER = 0.02
# Times sigma: the mean of Rayleigh air is 1.25, and over 5 x 5 voxels it stays below 1.8.
NOISE = 2.0
_WIDE = 5
_NEAREST = 0.25
_SMOOTH = 7
_MOST_PLANES = 48


def ghosting(view: ScanView) -> tuple[Finding, ...]:
    """Texture in air that follows the body's, shifted along a phase-encoding axis.

    The squared magnitude is freed of its mean over 7 voxels along the axis. For every shift, what
    is left in air is regressed on what is left in the body that many voxels away; the slope is
    the square of the ghost's amplitude. Smooth leakage of signal into air has no such texture.
    Shifts below a quarter of the axis are left out (ringing and blur).
    """
    findings = []
    for letter in (view.axes.phase, view.axes.partition):
        if letter is None:
            continue
        found = ghost_amplitude(view, LETTERS.index(letter))
        if found is not None and found[0] > GHOST and found[2] > CERTAIN:
            findings.append(_ghost_finding(letter, *found[:2]))
    return tuple(findings)


def ghost_amplitude(view: ScanView, axis: int) -> tuple[float, int, float] | None:
    """Strongest ghost along an axis: amplitude, shift in voxels, slope / standard error."""
    near = scipy.ndimage.binary_dilation(view.mask, iterations=3)
    across = 2 if axis != 2 else 0
    step = max(1, view.volume.shape[across] // _MOST_PLANES)
    index: list[Any] = [slice(None)] * 3
    index[across] = slice(None, None, step)
    power = view.magnitude[tuple(index)].astype(np.float64) ** 2
    texture = power - scipy.ndimage.uniform_filter1d(power, _SMOOTH, axis=axis, mode="wrap")
    air = scipy.ndimage.minimum_filter1d(
        ~near[tuple(index)] & (power > 0), _SMOOTH, axis=axis, mode="wrap"
    )
    body = np.where(view.mask[tuple(index)], texture, 0.0)
    left = np.where(air, texture, 0.0)
    weight = circular_correlation(air.astype(np.float64), body**2, axis)
    length = power.shape[axis]
    shift = np.minimum(np.arange(length), length - np.arange(length))
    enough = (weight > 0.02 * float((body**2).sum())) & (shift >= _NEAREST * length)
    if not enough.any():
        return None
    slope = circular_correlation(left, body, axis)[enough] / weight[enough]
    at = int(np.flatnonzero(enough)[np.argmax(slope)])
    best = float(slope.max())
    spread = circular_correlation(left**2, body**2, axis)[at]
    error = float(np.sqrt(max(spread, 1e-300)) / weight[at])
    return float(np.sqrt(max(best, 0.0))), at, best / error


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
    ends = [_filled(view, axis, end) for end in (0, -1)]
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


def _filled(view: ScanView, axis: int, end: int) -> float:
    """Share of a border plane in the body mask and above noise by the mean of its surroundings."""
    plane = np.take(view.magnitude, end, axis=axis)
    bright = scipy.ndimage.uniform_filter(plane, _WIDE, mode="nearest") > NOISE * view.noise.sigma
    return float((np.take(view.mask, end, axis=axis) & bright).mean())
