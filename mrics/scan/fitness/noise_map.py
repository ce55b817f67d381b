"""Noise that varies over the image: parallel imaging before, or correction of receive shading."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.view import ScanView
from mrics.scan.noise import detail_powers, quiet_mean

# Ratio of the 90 % to the 10 % point of sigma over the cells.
SPREAD = 1.75
# Share of the variance of log sigma that a quadratic surface explains.
SMOOTH = 0.85
_CELLS = 8
_DEEP = 24
_LEAST_CELLS = 14
_LEAST_BLOCKS = 24
_LEAST_QUIET = 8
# Share of a cell's blocks that must be quiet: in the others anatomy is mistaken for noise.
_QUIET_SHARE = 0.35
_QUIET_SHARE_MAGNITUDE = 0.55


def noise_varies(view: ScanView) -> tuple[Finding, ...]:
    """Sigma of the quiet blocks in each of 8 x 8 cells of the plane (and two along k in deep
    volumes), compared over the volume.

    A smooth surface (a quadratic explains 85 % of log sigma) is what dividing by a receive
    sensitivity leaves; anything else is what unfolding after parallel imaging leaves (the
    geometry factor).
    """
    sigma, place = _cells(view)
    if len(sigma) < _LEAST_CELLS:
        return ()
    low, high = np.quantile(sigma, [0.1, 0.9])
    spread = float(high / low)
    if spread <= SPREAD:
        return ()
    smooth = _explained(np.log(sigma), place) >= SMOOTH
    return (_corrected(spread) if smooth else _unfolded(spread),)


def _cells(view: ScanView) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Sigma of each cell with enough blocks, and the cell's place in -1 ... 1."""
    mask = None if view.has_phase else view.mask
    powers, usable, shape = detail_powers(view.volume, view.magnitude, mask)
    cells = (_CELLS, _CELLS, 2 if powers.shape[2] >= _DEEP else 1)
    splits = [np.array_split(np.arange(n), c) for n, c in zip(powers.shape, cells, strict=True)]
    share = _QUIET_SHARE if view.has_phase else _QUIET_SHARE_MAGNITUDE
    sigma, place = [], []
    for index in np.ndindex(*cells):
        box = np.ix_(*(splits[axis][index[axis]] for axis in range(3)))
        values = powers[box][usable[box]]
        if len(values) < _LEAST_BLOCKS:
            continue
        level, quiet = quiet_mean(values, shape)
        if quiet >= max(_LEAST_QUIET, share * len(values)) and level > 0:
            sigma.append(np.sqrt(level))
            place.append([2 * i / max(c - 1, 1) - 1 for i, c in zip(index, cells, strict=True)])
    return np.array(sigma), np.array(place)


def _explained(values: NDArray[np.float64], place: NDArray[np.float64]) -> float:
    x, y, z = place.T
    terms = np.stack([np.ones_like(x), x, y, z, x * x, y * y, x * y, x * z, y * z], axis=1)
    if len(values) < 2 * terms.shape[1]:
        return 0.0
    fit, *_ = np.linalg.lstsq(terms, values, rcond=None)
    rest = values - terms @ fit
    return float(1 - rest.var() / values.var())


def _corrected(spread: float) -> Finding:
    return Finding(
        code="receive-corrected",
        what=f"Noise varies smoothly over the image, by a factor of {spread:.1f}: it was scaled "
        "with position, as a correction of receive sensitivity does.",
        where="whole volume",
        statistic=spread,
        threshold=SPREAD,
        bias="One sigma does not hold everywhere: weights tuned to it smooth one part too much "
        "and another too little, and SNR is overstated where noise is low.",
        advice="Export without intensity correction.",
    )


def _unfolded(spread: float) -> Finding:
    return Finding(
        code="noise-varies",
        what=f"Noise varies over the image by a factor of {spread:.1f}, not smoothly: earlier "
        "parallel imaging leaves its geometry factor so.",
        where="whole volume",
        statistic=spread,
        threshold=SPREAD,
        bias="The reference was undersampled itself: its errors count as truth, and the stated "
        "acceleration comes on top of the earlier one.",
        advice="Use a scan without parallel imaging, or state its factor beside the result.",
    )
