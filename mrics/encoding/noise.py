"""Noise of an acquisition: its level, its covariance between channels, whitening.

Convention: sigma is the standard deviation of the real part of one k-space sample, and
Psi = E[n n^H]/2 is the covariance of the real parts of circular noise. With Psi = L L^H,
whitened data L^-1 n has E[n n^H] = 2 I.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding.acquisition import Acquisition
from mrics.errors import AcquisitionError

Array = NDArray[Any]
#: median of |n| / sigma for complex white noise (Rayleigh): sqrt(2 ln 2)
_RAYLEIGH_MEDIAN = float(np.sqrt(2 * np.log(2)))
_OUTER_SHARE = 0.1
_LEAST_SAMPLES = 64


def relative_covariance(covariance: Array, channels: int) -> Array:
    """A covariance scaled to a mean diagonal of 1, after checking that it can be one.

    Raises
    ------
    AcquisitionError
        Where it is of another size, not Hermitian or not positive definite.
    """
    psi = np.asarray(covariance, dtype=np.complex128)
    if psi.shape != (channels, channels):
        raise AcquisitionError(
            f"Noise covariance of shape {psi.shape} does not fit {channels} channels.",
            "covariance, axes (channel, channel)",
            f"Give a matrix of shape ({channels}, {channels}).",
        )
    if not np.allclose(psi, psi.conj().T, rtol=1e-6, atol=1e-9 * max(1e-300, np.abs(psi).max())):
        raise AcquisitionError(
            "Noise covariance is not Hermitian.",
            "covariance",
            "Give E[n n^H]/2, which equals its own conjugate transpose.",
        )
    lowest = float(np.linalg.eigvalsh(psi)[0])
    scale = float(np.trace(psi).real) / channels
    if not np.isfinite(lowest) or lowest <= 1e-12 * abs(scale):
        raise AcquisitionError(
            f"Noise covariance is not positive definite: its smallest eigenvalue is {lowest:.3g} "
            f"beside a mean variance of {scale:.3g}.",
            "covariance",
            "Use more noise samples than channels, or leave out dependent channels.",
        )
    return psi / scale


def whitening(covariance: Array) -> Array:
    """Matrix W = L^-1 of the Cholesky factor Psi = L L^H, so that W Psi W^H = I."""
    psi = np.asarray(covariance, dtype=np.complex128)
    factor = np.linalg.cholesky(psi)
    return np.linalg.solve(factor, np.eye(len(psi)))


def estimate_sigma(acquisition: Acquisition) -> float:
    """Noise level from the outermost measured k-space, robust against what signal is left there.

    The outer tenth of the acquired samples, by distance from the centre, is split into bands of
    equal count; each gives the median modulus over sqrt(2 ln 2) (Rayleigh median), and the lowest
    band is taken, since object signal can only add. At most 16 planes spread over the stack are
    read.

    Parameters
    ----------
    acquisition : Acquisition
        Measured or simulated data with at least 64 acquired samples a plane.

    Returns
    -------
    float
        Standard deviation of the real part of one k-space sample, mean over channels in the
        root-mean-square sense.

    Raises
    ------
    AcquisitionError
        Where too few samples are acquired.
    """
    planes, u, v = acquisition.shape
    chosen = np.unique(np.linspace(0, planes - 1, min(planes, 16)).round().astype(int))
    radius = np.hypot(
        (np.arange(u)[:, None] - u // 2) / (u / 2), (np.arange(v)[None, :] - v // 2) / (v / 2)
    )
    variances = np.zeros(acquisition.channels)
    bands = 4
    levels: list[list[list[Array]]] = [[[] for _ in range(bands)] for _ in variances]
    for plane in chosen:
        mask = np.broadcast_to(acquisition.mask[acquisition.pattern_index[plane]], (u, v))
        rows, columns = np.nonzero(mask)
        if len(rows) < _LEAST_SAMPLES:
            raise AcquisitionError(
                f"{len(rows)} acquired samples in plane {plane} are too few to estimate noise.",
                "mask",
                f"Give sigma, or acquire at least {_LEAST_SAMPLES} samples.",
            )
        outer = np.argsort(radius[rows, columns], kind="stable")
        outer = outer[-max(_LEAST_SAMPLES // 2, int(_OUTER_SHARE * len(rows))) :]
        for channel in range(acquisition.channels):
            modulus = np.abs(acquisition.kspace[plane, channel][rows[outer], columns[outer]])
            for band, part in enumerate(np.array_split(modulus, bands)):
                levels[channel][band].append(part)
    for channel, split in enumerate(levels):
        medians = [float(np.median(np.concatenate(part))) for part in split]
        variances[channel] = (min(medians) / _RAYLEIGH_MEDIAN) ** 2
    return float(np.sqrt(variances.mean()))
