"""Noise level of a scan, and how it was found."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import scipy
from numpy.typing import NDArray

from mrics.numerics.scaling import usual_size
from mrics.scan.mask import body_mask, spatial_magnitude
from mrics.scan.volume import Scan

# Mean / SD of Rayleigh noise, sqrt(pi/2) / sqrt(2 - pi/2) (Gudbjartsson & Patz 1995).
RAYLEIGH_RATIO = 1.9130583802711007
# How far the ratio of believed Rayleigh air may lie from that, as a share.
RATIO_SLACK = 0.12
# Detail below this share of air means that the noise is not white.
WHITE = 0.75
LEAST_BLOCKS = 12
_BLOCK = 8
_MARGIN = 2
# Sum of the squared autocorrelations of white noise after [1 -2 1]: 1 + 2 ((4/6)^2 + (1/6)^2).
_DETAIL_DEPENDENCE = (1 + 2 * (16 / 36 + 1 / 36)) ** 2


@dataclass(frozen=True)
class Noise:
    """A noise estimate.

    Attributes
    ----------
    sigma : float
        Standard deviation of the real part of one voxel, in the scan's units (that of one k-space
        sample where noise is white, since the transform is orthonormal).
    method : str
        "air": from blocks outside the body; "detail": from the finest detail of quiet blocks;
        "repeat": from the difference of the first two frames.
    blocks : int
        How many blocks of 8 x 8 voxels took part.
    ratio : float
        Mean / SD of the magnitude in quiet air; 1.913 for Rayleigh noise, 0 where there is none.
    """

    sigma: float
    method: str
    blocks: int
    ratio: float


def scan_sigma(scan: Scan) -> float:
    """Standard deviation of the noise in the real part of one voxel; see :func:`scan_noise`."""
    return scan_noise(scan).sigma


def scan_noise(scan: Scan, mask: NDArray[np.bool_] | None = None) -> Noise:
    """Estimate the noise of a magnitude or complex scan from its quiet blocks.

    The volume is cut into blocks of 8 x 8 voxels in the (i, j) plane; blocks with an exact zero
    are left out (masked air). Signal only ever adds power to a block, so the noise is the lower
    end of the blocks' mean powers: their mean below the 90 % point of the gamma law that pure
    noise would follow, corrected for the cut and solved by iteration from the lowest 5 %.

    * air: the power of blocks 2 voxels or more outside the body is 2 n sigma^2, with n = 1
      (Rayleigh) where mean / SD of their magnitudes is 1.913 to 12 %, and n from the central chi
      law where a magnitude scan has a larger ratio (root-sum-of-squares of channels,
      Constantinides et al. 1997). A smaller ratio is no noise, and the air is not believed.
    * detail: blocks filtered by [1 -2 1] along i and j (Immerkaer 1996), which removes edges
      along either axis; power is then 36 sigma^2 per part. Complex: all blocks. Magnitude:
      blocks inside the body, where Rician noise is Gaussian at SNR above 3.

    * repeat: where the scan has frames, the power of the difference of the first two (NEMA MS 1,
      two-image method), which has no structure as far as they show the same contrast.

    These can only err upwards on white noise, so the smallest is taken, unless detail is less
    than 0.75 of air: then the noise is not white (interpolated or filtered) and air is right.

    Parameters
    ----------
    scan : Scan
        First channel; first frame, or the first two.
    mask : ndarray of bool, shape (i, j, k), optional
        Body mask; made by :func:`mrics.scan.body_mask` where not given.
    """
    return choose_noise(noise_estimates(scan, mask))


def noise_estimates(scan: Scan, mask: NDArray[np.bool_] | None = None) -> dict[str, Noise]:
    """Every estimate of :func:`scan_noise` that the scan allows, by its method."""
    values, exponent = usual_size(scan.data)
    found = _estimates(replace(scan, data=values), mask)
    return {
        name: replace(noise, sigma=math.ldexp(noise.sigma, -exponent))
        for name, noise in found.items()
    }


def _estimates(scan: Scan, mask: NDArray[np.bool_] | None) -> dict[str, Noise]:
    data = first_volume(scan)
    mask = body_mask(data) if mask is None else mask
    magnitude = spatial_magnitude(data)
    found = {"detail": _detail_noise(data, magnitude, mask)}
    if scan.data.ndim == 4 and scan.frames > 1:
        found["repeat"] = _repeat_noise(scan.data[..., 1] - data, magnitude, mask)
    air = air_noise(magnitude, mask)
    if air is None:
        return found
    found = {name: replace(noise, ratio=air.ratio) for name, noise in found.items()}
    many = channels_of_ratio(air.ratio)
    if many is not None and (many == 1 or not np.iscomplexobj(data)):
        found["air"] = replace(air, sigma=air.sigma / float(np.sqrt(many)))
    return found


def choose_noise(estimates: dict[str, Noise]) -> Noise:
    """The estimate to believe; see :func:`scan_noise`."""
    inside = estimates["detail"]
    repeat, air = estimates.get("repeat"), estimates.get("air")
    if repeat is not None and 0 < repeat.sigma < inside.sigma:
        inside = repeat
    if air is None or WHITE * air.sigma <= inside.sigma < air.sigma:
        return inside
    return air


def first_volume(scan: Scan) -> NDArray[Any]:
    """First frame and channel, shape (i, j, k); real where no imaginary part differs from 0."""
    data = scan.data
    while data.ndim > 3:
        data = data[..., 0]
    return data if np.iscomplexobj(data) and data.imag.any() else data.real


def air_noise(magnitude: NDArray[Any], mask: NDArray[np.bool_]) -> Noise | None:
    """Root of half the mean power in quiet air, or None where there is too little air."""
    near = scipy.ndimage.binary_dilation(mask, iterations=_MARGIN)
    usable = _block_mean((magnitude > 0) & ~near) == 1
    if np.count_nonzero(usable) < LEAST_BLOCKS:
        return None
    power = _block_mean(np.square(magnitude))[usable]
    mean = _block_mean(magnitude)[usable]
    shape = float(_BLOCK**2)
    level, count = quiet_mean(power / 2, shape)
    quiet = power / 2 <= level * scipy.special.gammaincinv(shape, 0.98) / shape
    average, square = float(mean[quiet].mean()), float(power[quiet].mean())
    spread = float(np.sqrt(max(square - average**2, 0.0)))
    return Noise(float(np.sqrt(level)), "air", count, average / spread if spread > 0 else 0.0)


def channels_of_ratio(ratio: float) -> float | None:
    """Channels whose root sum of squares has this mean / SD in air (central chi law).

    1 where the ratio is Rayleigh's to 12 %, None where it is smaller.
    """
    if ratio < (1 - RATIO_SLACK) * RAYLEIGH_RATIO:
        return None
    if ratio < (1 + RATIO_SLACK) * RAYLEIGH_RATIO:
        return 1.0
    count = np.geomspace(1, 256, 512)
    mean = np.sqrt(2) * np.exp(scipy.special.gammaln(count + 0.5) - scipy.special.gammaln(count))
    return float(np.interp(ratio, mean / np.sqrt(2 * count - mean**2), count))


def detail_powers(
    data: NDArray[Any], magnitude: NDArray[Any], mask: NDArray[np.bool_] | None
) -> tuple[NDArray[np.float64], NDArray[np.bool_], float]:
    """Noise power of each block by its finest detail, which blocks count, and their gamma shape.

    White noise of SD sigma per part has power sigma^2. Blocks count that hold no exact zero and,
    where a mask is given, lie inside it.
    """
    parts = (data.real, data.imag) if np.iscomplexobj(data) else (data,)
    power = np.sum([_block_mean(np.square(second_difference(part))) for part in parts], axis=0)
    usable = _block_mean(magnitude > 0) == 1
    if mask is not None:
        usable &= _block_mean(mask) == 1
    return power / (36 * len(parts)), usable, len(parts) * _BLOCK**2 / (2 * _DETAIL_DEPENDENCE)


def _detail_noise(data: NDArray[Any], magnitude: NDArray[Any], mask: NDArray[np.bool_]) -> Noise:
    inside = None if np.iscomplexobj(data) else mask
    power, usable, shape = detail_powers(data, magnitude, inside)
    mean, count = quiet_mean(power[_enough(usable, magnitude)], shape)
    return Noise(float(np.sqrt(mean)), "detail", count, 0.0)


def _repeat_noise(change: NDArray[Any], magnitude: NDArray[Any], mask: NDArray[np.bool_]) -> Noise:
    parts = 2 if np.iscomplexobj(change) else 1
    power = _block_mean(np.square(np.abs(change))) / (2 * parts)
    usable = _block_mean(magnitude > 0) == 1
    if parts == 1:
        usable &= _block_mean(mask) == 1
    mean, count = quiet_mean(power[_enough(usable, magnitude)], parts * _BLOCK**2 / 2)
    return Noise(float(np.sqrt(mean)), "repeat", count, 0.0)


def _enough(usable: NDArray[np.bool_], magnitude: NDArray[Any]) -> NDArray[np.bool_]:
    """The usable blocks, or all without a zero, or all, where there are too few."""
    if np.count_nonzero(usable) >= LEAST_BLOCKS:
        return usable
    whole = _block_mean(magnitude > 0) == 1
    return whole if whole.any() else np.ones_like(whole)


def quiet_mean(values: NDArray[Any], shape: float) -> tuple[float, int]:
    """Mean of the purest of several noise powers, and how many they are.

    Parameters
    ----------
    values : ndarray of float, 1-D
        Powers of blocks: noise alone, or noise with signal on top.
    shape : float
        Shape of the gamma law of pure noise (1 / its relative variance).
    """
    cut = scipy.special.gammaincinv(shape, 0.9) / shape
    correction = scipy.special.gammainc(shape + 1, cut * shape) / 0.9
    mean = float(np.quantile(values, 0.05)) * shape / scipy.special.gammaincinv(shape, 0.05)
    kept = values
    for _ in range(50):
        kept = values[values < cut * mean]
        if kept.size == 0:
            return float(values.min()), 1
        moved = float(kept.mean(dtype=np.float64)) / correction
        if abs(moved - mean) <= 1e-6 * mean:
            break
        mean = moved
    return mean, int(kept.size)


def second_difference(part: NDArray[Any]) -> NDArray[Any]:
    """[1 -2 1] along both plane axes; the squared weights sum to 36."""
    once = scipy.ndimage.correlate1d(part, [1.0, -2.0, 1.0], axis=0, mode="nearest")
    return scipy.ndimage.correlate1d(once, [1.0, -2.0, 1.0], axis=1, mode="nearest")


def _block_mean(values: NDArray[Any]) -> NDArray[np.float64]:
    """Mean over blocks of 8 x 8 in the (i, j) plane, shape (i / 8, j / 8, k)."""
    size = tuple(min(_BLOCK, n) for n in values.shape[:2])
    count = tuple(n // b for n, b in zip(values.shape[:2], size, strict=True))
    cut = values[: count[0] * size[0], : count[1] * size[1]]
    folded = cut.reshape(count[0], size[0], count[1], size[1], values.shape[2])
    return folded.mean(axis=(1, 3), dtype=np.float64)
