"""Spectra and correlations along one axis that show noise and fine detail rather than anatomy."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import scipy
from numpy.typing import NDArray

from mrics.numerics import centred_fft
from mrics.scan.noise import quiet_mean

_MOST_SEGMENTS = 6000
_LEAST_SEGMENTS = 150
LEAST_BLOCKS = 300
_KAISER = 7.0
_BLOCK = 8
_MOST_VOXELS = 3_000_000
# Weights [1 -4 6 -4 1] remove a cubic; the sum of the squared autocorrelations of white noise
# after them is 1 + 2 ((56^2 + 28^2 + 8^2 + 1) / 70^2).
_CROSS = np.array([1.0, -4.0, 6.0, -4.0, 1.0]) / np.sqrt(70.0)
_CROSS_DEPENDENCE = 1 + 2 * (56**2 + 28**2 + 8**2 + 1) / 70**2


@dataclass(frozen=True)
class LineSpectrum:
    """Power of detail along an axis.

    Attributes
    ----------
    frequency : ndarray of float
        0 ... 1, in units of the largest frequency of the grid.
    power : ndarray of float
        Median over segments, scaled to the mean of an exponential law, and mean of +k and -k;
        white noise of variance s has power s.
    segments : int
        How many segments took part.
    """

    frequency: NDArray[np.float64]
    power: NDArray[np.float64]
    segments: int


def line_spectrum(
    volume: NDArray[Any], region: NDArray[np.bool_], axis: int, length: int
) -> LineSpectrum | None:
    """Spectrum of line segments that lie wholly inside a region.

    Segments of ``length`` voxels, half overlapping, are freed of their linear trend, tapered by a
    Kaiser window of beta 7 (side lobes below -50 dB) and transformed; the median over segments
    ignores the few that cross strong edges. At most 6000 evenly chosen segments are used.

    Returns None where fewer than 150 segments fit.
    """
    segments = _segments(volume, region, axis, length)
    if len(segments) < _LEAST_SEGMENTS:
        return None
    place = np.arange(length) - (length - 1) / 2
    slope = (segments @ place) / (place @ place)
    flat = segments - segments.mean(axis=1, keepdims=True) - np.outer(slope, place)
    taper = np.kaiser(length, _KAISER)
    lines = centred_fft(flat * taper, (1,))
    power = np.median(lines.real**2 + lines.imag**2, axis=0)
    power *= length / (taper @ taper) / np.log(2)
    centre, reach = length // 2, (length - 1) // 2
    folded = (power[centre : centre + reach + 1] + power[centre - reach : centre + 1][::-1]) / 2
    return LineSpectrum(np.arange(reach + 1) / (length / 2), folded, len(segments))


def _segments(
    volume: NDArray[Any], region: NDArray[np.bool_], axis: int, length: int
) -> NDArray[Any]:
    lines = np.moveaxis(volume, axis, 2)
    inside = np.moveaxis(region, axis, 2)
    starts = range(0, lines.shape[2] - length + 1, max(1, length // 2))
    found = []
    for start in starts:
        whole = inside[:, :, start : start + length].all(axis=2)
        where = np.argwhere(whole)
        if len(where) > _MOST_SEGMENTS // len(starts):
            chosen = np.linspace(0, len(where) - 1, _MOST_SEGMENTS // len(starts)).astype(int)
            where = where[chosen]
        found.append(lines[where[:, 0], where[:, 1], start : start + length])
    if not found:
        return np.empty((0, length))
    kind = np.complex128 if np.iscomplexobj(volume) else np.float64
    return np.concatenate(found).astype(kind)


@dataclass(frozen=True)
class Correlation:
    """Correlation of noise along an axis.

    Attributes
    ----------
    lags : ndarray of float
        Correlation at distance 0 ... 5 voxels.
    blocks : int
        Quiet blocks of 8 x 8 voxels that took part.
    """

    lags: NDArray[np.float64]
    blocks: int

    @property
    def anatomy(self) -> float:
        """What leftover anatomy adds to rho(1): it decays slowly, so later lags tell.

        The larger of rho(2) + rho(3) and of the geometric continuation rho(2)^2 / rho(3), which
        fine fibres along the axis follow (at most 2.2 rho(2)).
        """
        second, third = float(self.lags[2]), float(self.lags[3])
        linear = second + third
        if second <= 0 or third <= 0:
            return linear
        return max(linear, min(second**2 / third, 2.2 * second))

    @property
    def excess(self) -> float:
        """rho(1) less :attr:`anatomy`: near or below 0 for white noise.

        Linear interpolation by 0.2 voxel gives 0.23, a Hamming window 0.47, zero-filling by 1.25
        gives 0.27.
        """
        return float(self.lags[1]) - self.anatomy


def noise_correlation(
    volume: NDArray[Any], region: NDArray[np.bool_], axis: int
) -> Correlation | None:
    """Correlation of noise with itself along one axis, in blocks where there is little else.

    The volume is filtered by [1 -4 6 -4 1] along the other in-plane axis (both, for the slice
    axis), which takes away whatever is smooth across the lines and leaves the noise along them
    as it is. Of blocks of 8 x 8 voxels inside ``region`` the quiet ones are kept, as in
    :func:`mrics.scan.noise.scan_noise`.

    Returns None where fewer than 300 quiet blocks remain.
    """
    across = 1 - axis if axis < 2 else 0
    third = next(a for a in range(3) if a not in (axis, across))
    values, inside = _thinned(volume, third), _thinned(region, third)
    if values.shape[axis] < _BLOCK or values.shape[across] < _BLOCK:
        return None
    for filtered in (across,) if axis < 2 else (0, 1):
        values = scipy.ndimage.correlate1d(values, _CROSS, axis=filtered, mode="nearest")
    blocks = _blocks(values.transpose(axis, across, third))
    kept = blocks[_blocks(inside.transpose(axis, across, third)).all(axis=(1, 2))]
    if len(kept) < LEAST_BLOCKS:
        return None
    parts = 2 if np.iscomplexobj(volume) else 1
    power = np.square(np.abs(kept)).mean(axis=(1, 2), dtype=np.float64)
    shape = parts * _BLOCK**2 / (2 * _CROSS_DEPENDENCE)
    level, _ = quiet_mean(power, shape)
    quiet = kept[power < 1.6 * level]
    if len(quiet) < LEAST_BLOCKS:
        return None
    total = np.square(np.abs(quiet)).mean(dtype=np.float64)
    lags = [1.0]
    for lag in range(1, 6):
        product = (quiet[:, :-lag] * np.conj(quiet[:, lag:])).real
        lags.append(float(product.mean(dtype=np.float64) / total))
    return Correlation(np.array(lags), len(quiet))


def _thinned(values: NDArray[Any], third: int) -> NDArray[Any]:
    """Evenly chosen planes across an axis, so that large scans cost no more than they must."""
    step = max(1, values.size // _MOST_VOXELS)
    index: list[Any] = [slice(None)] * 3
    index[third] = slice(step // 2, None, step)
    return values[tuple(index)]


def _blocks(values: NDArray[Any]) -> NDArray[Any]:
    """(n, 8, 8): blocks over the first two axes."""
    count = (values.shape[0] // _BLOCK, values.shape[1] // _BLOCK)
    cut = values[: count[0] * _BLOCK, : count[1] * _BLOCK]
    folded = cut.reshape(count[0], _BLOCK, count[1], _BLOCK, values.shape[2])
    return folded.transpose(0, 2, 4, 1, 3).reshape(-1, _BLOCK, _BLOCK)
