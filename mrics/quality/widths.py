"""Widths of responses and edges, measured between samples.

Lines are interpolated with the sinc kernel, taken as zero outside the window given, so that the
response of full sampling, one non-zero sample, has the width of the sinc: 1.2067 voxels.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

Array = NDArray[Any]
FINE = 32


class Widths(NamedTuple):
    """Measured on lines through their peaks, in samples.

    Attributes
    ----------
    width : ndarray
        Full width at half of the peak; infinite where the line does not fall below half inside
        the window, NaN where the line is not above it at the peak.
    shift : ndarray
        Peak position against the middle of the window.
    peak : ndarray
        Height of the interpolated peak, or the level given.
    """

    width: Array
    shift: Array
    peak: Array


def interpolate_lines(lines: Array, fine: int = FINE) -> Array:
    """Lines of shape (n, samples) at ``fine`` points per sample, by the sinc kernel."""
    samples = lines.shape[-1]
    at = np.arange((samples - 1) * fine + 1) / fine
    return lines @ np.sinc(np.arange(samples)[:, None] - at[None, :])


def half_widths(lines: Array, level: Array | None = None, reach: float = 1.5) -> Widths:
    """Full widths at half maximum of real lines.

    Parameters
    ----------
    lines : ndarray of shape (n, 2 h + 1), real
        Windows centred on the sites.
    level : ndarray of shape (n,), optional
        What to take half of, and measure from the middle out: for things wider than a point, whose
        ringing makes the highest sample a poor level. The peak near the middle if left out.
    reach : float
        How far from the middle the peak may lie, in samples.
    """
    fine = interpolate_lines(np.asarray(lines, dtype=np.float64))
    count, points = fine.shape
    middle = (points - 1) // 2
    rows = np.arange(count)
    if level is None:
        span = min(middle, round(reach * FINE))
        near = fine[:, middle - span : middle + span + 1]
        top = near.argmax(axis=1) + middle - span
        peak = fine[rows, top]
    else:
        top = np.full(count, middle)
        peak = np.asarray(level, dtype=np.float64)
    below = fine < 0.5 * peak[:, None]
    index = np.arange(points)
    right = np.where(below & (index >= top[:, None]), index, points).min(axis=1)
    left = np.where(below & (index <= top[:, None]), index, -1).max(axis=1)
    width = np.full(count, np.inf)
    inside = (right < points) & (left >= 0) & (peak > 0) & (right > left)
    r, lo, row = right[inside], left[inside], rows[inside]
    half = 0.5 * peak[inside]
    # Linear between the two fine points that hold half the peak.
    after = r - (half - fine[row, r]) / (fine[row, r - 1] - fine[row, r])
    before = lo + (half - fine[row, lo]) / (fine[row, lo + 1] - fine[row, lo])
    width[inside] = (after - before) / FINE
    width[~(peak > 0) | (right <= left)] = np.nan
    return Widths(width, (top - middle) / FINE, peak)


def edge_widths(profiles: Array, step: float, plateau: float = 0.25) -> Array:
    """10 to 90 % rise of edge profiles.

    Parameters
    ----------
    profiles : ndarray of shape (n, samples), real
        Across the edge, which lies near the middle; rising or falling.
    step : float
        Distance of samples, in the unit wanted.
    plateau : float
        Share of the profile at each end whose mean is the level there.

    Returns
    -------
    ndarray of shape (n,)
        Distance between the last crossing of 10 % and the first of 90 % around the middle of the
        rise; NaN where the two levels are equal or not crossed.
    """
    lines = np.asarray(profiles, dtype=np.float64)
    count, samples = lines.shape
    ends = max(1, round(plateau * samples))
    low, high = lines[:, :ends].mean(axis=1), lines[:, -ends:].mean(axis=1)
    width = np.full(count, np.nan)
    for row in range(count):
        rise = high[row] - low[row]
        if rise == 0.0:
            continue
        unit = (lines[row] - low[row]) / rise
        crossings = np.flatnonzero((unit[:-1] < 0.5) & (unit[1:] >= 0.5))
        if crossings.size == 0:
            continue
        middle = int(crossings[np.abs(crossings - samples / 2).argmin()])
        under = np.flatnonzero(unit[: middle + 1] <= 0.1)
        over = np.flatnonzero(unit[middle + 1 :] >= 0.9) + middle + 1
        if under.size == 0 or over.size == 0:
            continue
        a, b = int(under[-1]), int(over[0])
        start = a + (0.1 - unit[a]) / (unit[a + 1] - unit[a])
        stop = b - (unit[b] - 0.9) / (unit[b] - unit[b - 1])
        width[row] = (stop - start) * step
    return width
