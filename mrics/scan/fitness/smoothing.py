"""Noise that is correlated from voxel to voxel: a filter, or interpolation onto another grid."""

from __future__ import annotations

import numpy as np

from mrics.scan.fitness.edges import roll_off
from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.partial import measured_share
from mrics.scan.fitness.spectrum import Correlation
from mrics.scan.fitness.view import ScanView
from mrics.scan.fitness.zero_fill import measured_matrix
from mrics.scan.volume import LETTERS

# rho(1) - rho(2) - rho(3) of noise above which it counts as correlated.
EXCESS = 0.08
# Added to it, over the root of the number of blocks: three standard errors.
EXCESS_ERROR = 0.6
# Fall of the ends of k-space below the trend before them, dB.
ROLL_OFF_DB = 1.8
# Linear interpolation halfway between voxels correlates neighbours by 0.5 and no others.
_MOST_LINEAR = 0.54
_FLAT = 0.07
_UNFILTERED = (
    "Export without image filter; else restrict the study to the flat part of k-space and "
    "add noise."
)


def smoothed_noise(view: ScanView) -> tuple[Finding, ...]:
    """Noise correlated along an axis that is not zero-filled: filtered, or resampled.

    Linear interpolation correlates next neighbours only, by up to 0.5; a filter of k-space that
    tapers (Hamming, Fermi, Tukey) either correlates more or makes later lags negative. A filter
    that only touches the ends of k-space hardly correlates noise, but the ends of the profile
    fall below the trend before them.
    """
    findings = []
    for axis in range(3):
        if measured_matrix(view, axis) is not None or measured_share(view, axis) is not None:
            continue  # an empty part of k-space correlates noise too
        correlation = view.correlation(axis)
        fall = roll_off(view.power(axis)) if axis in view.encoded else None
        if correlation is not None and correlation.excess > least_excess(correlation):
            make = _resampled if _is_linear(correlation) else _filtered
            findings.append(make(LETTERS[axis], correlation))
        elif fall is not None and fall > ROLL_OFF_DB:
            findings.append(_rolled_off(LETTERS[axis], fall))
    return tuple(findings)


def least_excess(correlation: Correlation) -> float:
    """Excess above which noise counts as correlated."""
    return EXCESS + EXCESS_ERROR / float(np.sqrt(correlation.blocks))


def _is_linear(correlation: Correlation) -> bool:
    first, *later = (float(value) for value in correlation.lags[1:])
    anatomy = max((later[1] + later[2]) / 2, 0.0)
    return first <= _MOST_LINEAR + anatomy and abs(later[0] - 1.5 * anatomy) <= _FLAT


def linear_shift(first_lag: float) -> float:
    """Distance 0 ... 0.5 voxel of a linear interpolation from its correlation of neighbours.

    With weights 1 - d and d on white noise, rho(1) = d (1 - d) / (1 - 2 d (1 - d)).
    """
    product = min(first_lag / (1 + 2 * first_lag), 0.25)
    return float(0.5 - np.sqrt(0.25 - product))


def _resampled(letter: str, correlation: Correlation) -> Finding:
    return Finding(
        code="resampled",
        what=f"Noise of neighbours along {letter} is correlated ({correlation.lags[1]:.2f}) as by "
        f"interpolation {linear_shift(correlation.lags[1]):.1f} voxel between samples.",
        where=f"axis {letter}",
        statistic=correlation.excess,
        threshold=least_excess(correlation),
        bias="Interpolation took fine detail and noise away: less is left to lose, so "
        "undersampling looks better than on measured data.",
        advice="Use the scan before registration, rotation or reslicing; else add noise and judge "
        "only detail coarser than two voxels.",
        remedy="add_noise",
    )


def _filtered(letter: str, correlation: Correlation) -> Finding:
    return Finding(
        code="filtered",
        what=f"Noise along {letter} is correlated ({correlation.lags[1]:.2f}, "
        f"{correlation.lags[2]:.2f} at one and two voxels): k-space was windowed or the image "
        "smoothed.",
        where=f"axis {letter}",
        statistic=correlation.excess,
        threshold=least_excess(correlation),
        bias="Outer k-space is weak, so leaving it out costs little: patterns that skip it look "
        "better than they are.",
        advice=_UNFILTERED,
        remedy="add_noise",
    )


def _rolled_off(letter: str, fall: float) -> Finding:
    return Finding(
        code="filtered",
        what=f"The ends of k-space along {letter} fall {fall:.1f} dB below the trend before them: "
        "a filter rolls them off.",
        where=f"axis {letter}, outer k-space",
        statistic=fall,
        threshold=ROLL_OFF_DB,
        bias="Outer k-space is weak, so leaving it out costs little: patterns that skip it look "
        "better than they are.",
        advice=_UNFILTERED,
        remedy="add_noise",
    )
