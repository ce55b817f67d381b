"""Edges in k-space: where power falls at once, as nothing natural does."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mrics.scan.fitness.spectrum import LineSpectrum

_WINDOW = 3
_GUARD = 2
_SIDE = 4


@dataclass(frozen=True)
class Edge:
    """A fall of power.

    Attributes
    ----------
    fall_db : float
        How far power falls beyond the trend on both sides, in dB.
    place : float
        Where: sample of a profile (last one before the fall), or frequency 0 ... 1 of a spectrum.
    before_db, after_db : float
        Slope before and after the step, in dB from frequency 0 to 1 (spectra only).
    exponent : float
        p where the power before the step falls as frequency to the -p (spectra only).
    sharpness : float
        Whole fall over that which the slope before the step would have made (spectra only).
    """

    fall_db: float
    place: float
    before_db: float = 0.0
    after_db: float = 0.0
    exponent: float = 0.0
    sharpness: float = 0.0


def _decibels(power: NDArray[np.float64]) -> NDArray[np.float64]:
    """10 log10, with a floor 160 dB below the largest."""
    return 10 * np.log10(power + 1e-16 * power.max() + np.finfo(np.float64).tiny)


def profile_edge(power: NDArray[np.float64]) -> Edge:
    """Largest fall from one sample of a one-sided k-space profile to all samples further out.

    ``power`` starts at zero frequency. The fall is counted from the lowest of the last three
    samples before it, less their own decline, so that a smooth taper to nothing is no edge.
    Searched from 0.15 of the half axis on.
    """
    level = _decibels(power)
    outer = np.maximum.accumulate(level[::-1])[::-1]
    best = Edge(0.0, float(len(level) - 1))
    for last in range(max(_WINDOW, int(0.15 * len(level))), len(level) - _WINDOW):
        inner = level[last - _WINDOW + 1 : last + 1]
        fall = float(inner.min() - outer[last + 1] - max(inner[0] - inner[-1], 0.0))
        if fall > best.fall_db:
            best = Edge(fall, float(last))
    return best


def spectrum_edge(spectrum: LineSpectrum, lowest: float, highest: float) -> Edge:
    """Largest step of a line spectrum between two windows, beyond the trend of both.

    Two samples on either side of the step are left out, since the taper smears it over them; the
    windows are four samples wide. The trend taken off is the mean of both windows' slopes, a
    little more than a convex decline falls between them.
    """
    level = _decibels(spectrum.power)
    best = Edge(0.0, 1.0)
    for at in range(_SIDE, len(level) - _GUARD - 1):
        if not lowest <= spectrum.frequency[at] <= highest:
            continue
        inner = np.arange(max(2, at - _GUARD - _SIDE + 1), at - _GUARD + 1)
        outer = np.arange(at + _GUARD, min(len(level), at + _GUARD + _SIDE))
        if len(inner) < 2 or len(outer) < 2:
            continue
        before = float(np.polyfit(inner, level[inner], 1)[0])
        after = float(np.polyfit(outer, level[outer], 1)[0])
        whole = float(level[inner].mean() - level[outer].mean())
        distance = float(outer.mean() - inner.mean())
        fall = whole + (before + after) / 2 * distance
        if fall > best.fall_db:
            step = float(spectrum.frequency[1])
            best = Edge(
                fall,
                float(spectrum.frequency[at]),
                before_db=before / step,
                after_db=after / step,
                exponent=-before * float(inner.mean()) * np.log(10) / 10,
                sharpness=whole / max(-before * distance, 1.0),
            )
    return best


def roll_off(power: NDArray[np.float64]) -> float | None:
    """How far a k-space profile falls at its ends below the trend before them, in dB.

    The trend is a line through the level (mean of +k and -k) from 0.72 to 0.9 of the largest
    frequency; the end is the outer 4.5 %, at least two samples. Natural spectra flatten outwards,
    which makes it negative. None for axes shorter than 48.
    """
    length = len(power)
    if length < 48:
        return None
    centre, reach = length // 2, (length - 1) // 2
    folded = (power[centre : centre + reach + 1] + power[centre - reach : centre + 1][::-1]) / 2
    level = _decibels(folded)
    frequency = np.arange(reach + 1) / (length / 2)
    before = (frequency > 0.72) & (frequency < 0.9)
    end = frequency > min(0.955, 1 - 5 / length)
    trend = np.polyfit(frequency[before], level[before], 1)
    return float((np.polyval(trend, frequency[end]) - level[end]).mean())


def half_power_place(spectrum: LineSpectrum, edge: Edge) -> float:
    """Frequency at which power is half of that before the edge, interpolated.

    A sharp end of the spectrum, smeared by the symmetric window, has half power at its place.
    """
    level = _decibels(spectrum.power)
    at = int(np.argmin(np.abs(spectrum.frequency - edge.place)))
    inner = np.arange(max(2, at - _GUARD - _SIDE), at - _GUARD + 1)
    trend = np.polyfit(inner, level[inner], 1)
    below = level - np.polyval(trend, np.arange(len(level))) + 10 * np.log10(2)
    for sample in range(int(inner[-1]), len(level) - 1):
        if below[sample] > 0 >= below[sample + 1]:
            part = below[sample] / (below[sample] - below[sample + 1])
            step = spectrum.frequency[1] - spectrum.frequency[0]
            return float(spectrum.frequency[sample] + part * step)
    return edge.place
