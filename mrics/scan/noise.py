"""Noise level of a scan, and how it was found."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from mrics.scan.mask import body_mask
from mrics.scan.volume import Scan

# Median of a Rayleigh variable in units of sigma, sqrt(2 ln 2) (Gudbjartsson & Patz 1995).
RAYLEIGH_MEDIAN = 1.1774100225154747
# Mean / SD of Rayleigh noise, sqrt(pi/2) / sqrt(2 - pi/2).
RAYLEIGH_RATIO = 1.9130583802711007
# Median of |x| of a Gaussian in units of its SD.
GAUSS_MAD = 0.6744897501960817
# Air voxels needed before air is believed.
LEAST_AIR = 500
_MARGIN = 3


@dataclass(frozen=True)
class Noise:
    """A noise estimate.

    Attributes
    ----------
    sigma : float
        Standard deviation of the real part of one voxel, in the scan's units (that of one k-space
        sample where noise is white, since the transform is orthonormal).
    method : str
        "air": from voxels outside the body; "detail": from the finest detail inside it.
    voxels : int
        How many voxels took part.
    ratio : float
        Mean / SD of the magnitude in air; 1.913 for Rayleigh noise, 0 where there is no air.
    """

    sigma: float
    method: str
    voxels: int
    ratio: float


def scan_sigma(scan: Scan) -> float:
    """Standard deviation of the noise in the real part of one voxel; see :func:`scan_noise`."""
    return scan_noise(scan).sigma


def scan_noise(scan: Scan, mask: NDArray[np.bool_] | None = None) -> Noise:
    """Estimate the noise of a magnitude or complex scan.

    Where at least 500 voxels of air (more than 3 voxels away from the body, and not exactly zero)
    are at hand and their magnitude has the mean-to-SD ratio of Rayleigh noise to 12 %, sigma is
    their median / sqrt(2 ln 2) (Rayleigh median; magnitude and complex scans alike). Values above
    5 sigma, which ghosts cause, are left out and the median taken again.

    Masked, filtered, clipped or absent air says nothing; sigma then comes from the finest detail
    inside the body: real and imaginary part (or the magnitude, where Rician noise of SNR above 3
    is Gaussian) are filtered by [1 -2 1] along both plane axes and the median modulus is scaled
    by 1 / (6 x 0.6745) (in the manner of Immerkaer 1996 and Donoho 1995). Fine structure raises
    this figure and interpolation lowers it.

    Parameters
    ----------
    scan : Scan
        First frame and first channel are used.
    mask : ndarray of bool, shape (i, j, k), optional
        Body mask; made by :func:`body_mask` where not given.
    """
    data = scan.data
    while data.ndim > 3:
        data = data[..., 0]
    mask = body_mask(data) if mask is None else mask
    air = air_values(data, mask)
    if air.size >= LEAST_AIR:
        sigma = float(np.median(air)) / RAYLEIGH_MEDIAN
        air = air[air < 5 * sigma]
        spread = float(air.std()) if air.size else 0.0
        ratio = float(air.mean()) / spread if spread > 0 else 0.0
        if abs(ratio / RAYLEIGH_RATIO - 1) < 0.12:
            return Noise(float(np.median(air)) / RAYLEIGH_MEDIAN, "air", air.size, ratio)
    else:
        ratio = 0.0
    detail = _detail(data, mask)
    return Noise(float(np.median(detail)) / (6 * GAUSS_MAD), "detail", detail.size, ratio)


def air_values(data: NDArray[Any], mask: NDArray[np.bool_]) -> NDArray[np.float32]:
    """Non-zero magnitudes outside the body, more than 3 voxels away from it."""
    near = ndimage.binary_dilation(mask, iterations=_MARGIN)
    air = np.abs(data[~near])
    return air[air > 0]


def _detail(data: NDArray[Any], mask: NDArray[np.bool_]) -> NDArray[Any]:
    inside = ndimage.binary_erosion(mask, iterations=2)
    inside = inside if inside.any() else mask
    parts = (data.real, data.imag) if np.iscomplexobj(data) else (data,)
    return np.concatenate([np.abs(_second_difference(part))[inside] for part in parts])


def _second_difference(part: NDArray[Any]) -> NDArray[Any]:
    """[1 -2 1] along both plane axes; the squared weights sum to 36."""
    once = ndimage.correlate1d(part, [1.0, -2.0, 1.0], axis=0, mode="nearest")
    return ndimage.correlate1d(once, [1.0, -2.0, 1.0], axis=1, mode="nearest")
