"""Noise gain by pseudo multiple replica: what a recovery makes of the noise in the data.

Noise of the acquisition's own level and channel covariance is added to the data again and again,
each replica is recovered, and the standard deviation over replicas is taken voxel by voxel.

References
----------
Robson et al. 2008, Magn Reson Med 60:895-907, doi:10.1002/mrm.21728.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import blocks
from mrics.errors import QualityError
from mrics.numerics import stream
from mrics.quality.chain import Chain, Progress

Array = NDArray[Any]
PERCENTILES = (5, 25, 50, 75, 95)


@dataclass(frozen=True)
class NoiseGain:
    """Noise of a recovered image against a fully sampled one.

    Attributes
    ----------
    sd : ndarray of shape (plane, u, v)
        Standard deviation of the real part (root of half the complex variance), in image units.
    full : ndarray of shape (plane or 1, u, v)
        The same for full sampling, best linear combination of channels; NaN where no channel sees
        the voxel.
    ratio : ndarray
        ``sd / full``: noise against the full scan, which took R times as long.
    gain : ndarray
        ``ratio / sqrt(R)``: noise against a full scan of equal acquisition time.
    acceleration : float
        R, the achieved one.
    replicas : int
    sigma : float
        Standard deviation of the real part of one k-space sample.
    ratio_percentiles, gain_percentiles : dict of int to float
        In the mask: 5, 25, 50, 75, 95.
    note : str
        For non-linear recoveries, that the gain is local.
    """

    sd: Array
    full: Array
    ratio: Array
    gain: Array
    acceleration: float
    replicas: int
    sigma: float
    ratio_percentiles: dict[int, float]
    gain_percentiles: dict[int, float]
    note: str


def noise_gain(
    chain: Chain,
    replicas: int = 60,
    *,
    mask: NDArray[np.bool_] | None = None,
    seed: int = 0,
    progress: Progress | None = None,
) -> NoiseGain:
    """Measure the noise gain of a recovery.

    Parameters
    ----------
    chain : Chain
        Acquisition and frozen recovery.
    replicas : int
        At least 2; the standard deviation of a voxel is known to about ``1 / sqrt(4 replicas)``.
    mask : ndarray of bool, shape (plane, u, v), optional
        Voxels the percentiles are taken over; all if left out.
    seed : int
        Of the replicas' noise.
    progress : callable of (done, total), optional

    Raises
    ------
    QualityError
        For fewer than 2 replicas, and a mask of another shape or without voxels.
    """
    if replicas < 2:
        raise QualityError(
            f"{replicas} replicas give no standard deviation.", "replicas", "Use at least 2."
        )
    inside = _inside(chain, mask)
    total = np.zeros(chain.base.shape, dtype=np.complex128)
    square = np.zeros(chain.base.shape)
    noise = (chain.noise(stream(seed, "replica", number)) for number in range(replicas))
    for image in chain.images(noise, total=replicas, progress=progress):
        change = image - chain.base
        total += change
        square += change.real.astype(np.float64) ** 2 + change.imag.astype(np.float64) ** 2
    spread = square - (total.real**2 + total.imag**2) / replicas
    sd = np.sqrt(np.maximum(spread, 0.0) / (2.0 * (replicas - 1)))
    full = full_sampling_sd(chain)
    ratio = sd / full
    acceleration = chain.acquisition.pattern.acceleration
    gain = ratio / np.sqrt(acceleration)
    return NoiseGain(
        sd=sd,
        full=full,
        ratio=ratio,
        gain=gain,
        acceleration=acceleration,
        replicas=replicas,
        sigma=chain.sigma,
        ratio_percentiles=_percentiles(ratio, inside),
        gain_percentiles=_percentiles(gain, inside),
        note=""
        if chain.linear
        else "This recovery is not linear: the noise gain holds for this image at this noise only.",
    )


def full_sampling_sd(chain: Chain) -> Array:
    """Standard deviation of the real part for full sampling: sigma / sqrt(s^H Psi^-1 s)."""
    energies = [encoding.energy for _, encoding, _ in blocks(chain.acquisition)]
    shared = all(energy.shape[0] == 1 for energy in energies)
    energy = energies[0] if shared else np.concatenate(energies)
    energy = energy.astype(np.float64)
    sd = np.full(energy.shape, np.nan)
    np.divide(chain.sigma, np.sqrt(energy), out=sd, where=energy > 0.0)
    return sd


def _inside(chain: Chain, mask: NDArray[np.bool_] | None) -> NDArray[np.bool_]:
    if mask is None:
        return np.ones(chain.base.shape, dtype=bool)
    if mask.shape != chain.base.shape or not mask.any():
        raise QualityError(
            f"Mask of shape {mask.shape} with {int(mask.sum())} voxels does not fit images of "
            f"shape {chain.base.shape}.",
            "mask",
            "Give a mask on the image's grid that holds the body.",
        )
    return mask.astype(bool, copy=False)


def _percentiles(values: Array, inside: NDArray[np.bool_]) -> dict[int, float]:
    seen = values[inside & np.isfinite(values)]
    if seen.size == 0:
        return {}
    return {
        share: float(value)
        for share, value in zip(PERCENTILES, np.percentile(seen, PERCENTILES), strict=True)
    }
