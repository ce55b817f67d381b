"""Anatomical background: a stationary random field whose power falls with spatial frequency."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import QualityError
from mrics.numerics import centred_fft

Array = NDArray[Any]
_TILES = (64, 48, 32, 24)
_BINS = 24


@dataclass(frozen=True)
class Spectrum:
    """Power of one k-space sample, per real part: level (1 + (f / corner)^2)^(-exponent / 2).

    The covariance of the background's real (and imaginary) part is K' = F^H diag(S') F with S' this
    spectrum; E|F x|^2 of the complex field is twice that (circular, as for noise).

    Attributes
    ----------
    level : float
        Power at zero frequency, square of the image's unit.
    corner : float
        Frequency in cycles per mm up to which it is flat.
    exponent : float
        Slope beyond: power falls as ``f ** -exponent``.
    """

    level: float
    corner: float
    exponent: float

    def at(self, frequency: Array) -> Array:
        """Power at radial frequencies in cycles per mm."""
        ratio = np.asarray(frequency) / self.corner
        return np.asarray(self.level * (1.0 + ratio**2) ** (-0.5 * self.exponent))

    def on_grid(self, shape: tuple[int, int], voxel_mm: tuple[float, float]) -> Array:
        """Power on the centred k-space grid of a plane, shape (u, v)."""
        return self.at(radial_frequency(shape, voxel_mm))


def radial_frequency(shape: tuple[int, int], voxel_mm: tuple[float, float]) -> Array:
    """Distance from the k-space centre in cycles per mm, centred, shape (u, v)."""
    axes = [(np.arange(n) - n // 2) / (n * step) for n, step in zip(shape, voxel_mm, strict=True)]
    return np.hypot(axes[0][:, None], axes[1][None, :])


def fit_spectrum(
    images: Array,
    voxel_mm: tuple[float, float],
    *,
    mask: NDArray[np.bool_] | None = None,
    sigma: float = 0.0,
) -> Spectrum:
    """Radial power spectrum of training images.

    Tiles of 64 x 64 voxels (smaller ones where no such tile fits the body) are taken about half a
    tile apart, those at least half inside the mask; mean removed, Hann window, power divided by the
    window's energy. The power of noise, 2 sigma^2, is taken off, and a power law is fitted to the
    radial means in double logarithm, between two cycles per tile and 90 % of the lower Nyquist
    frequency. Below one cycle per tile the law is flat.

    Parameters
    ----------
    images : ndarray of shape (plane, u, v), real or complex
        Fully sampled training images; real ones are taken as they are.
    voxel_mm : tuple of float
    mask : ndarray of bool, same shape, optional
    sigma : float
        Noise level of the images (standard deviation of the real part).

    Raises
    ------
    QualityError
        For a mask of another shape, and where no tile has signal above noise.
    """
    images = np.asarray(images)
    if mask is not None and mask.shape != images.shape:
        raise QualityError(
            f"Mask and training images differ in shape: {mask.shape} and {images.shape}.",
            "mask",
            "Give a mask on the images' grid.",
        )
    boxes: list[tuple[Any, ...]] = []
    for tile_size in _TILES:
        size = (min(tile_size, images.shape[1]), min(tile_size, images.shape[2]))
        boxes = _boxes(images.shape, size, mask)
        if boxes:
            break
    window = np.outer(np.hanning(size[0] + 2)[1:-1], np.hanning(size[1] + 2)[1:-1])
    power, count = np.zeros(size), len(boxes)
    for box in boxes:
        tile = images[box].astype(np.complex128)
        tile = (tile - (tile * window).sum() / window.sum()) * window
        power += np.abs(centred_fft(tile)) ** 2 * (tile.size / (window**2).sum())
    frequency = radial_frequency(size, voxel_mm)
    lowest = max(1.0 / (n * step) for n, step in zip(size, voxel_mm, strict=True))
    highest = 0.45 / max(voxel_mm)
    means = power / max(1, count) - 2.0 * sigma**2
    edges = np.geomspace(2.0 * lowest, highest, _BINS + 1)
    place = np.digitize(frequency.ravel(), edges) - 1
    good = (place >= 0) & (place < _BINS)
    counts = np.bincount(place[good], minlength=_BINS)
    sums = np.bincount(place[good], weights=means.ravel()[good], minlength=_BINS)
    filled = (counts > 0) & (sums > 0.0)
    if count == 0 or filled.sum() < 3:
        raise QualityError(
            f"No background spectrum can be fitted: {count} tiles of {size} voxels, "
            f"{int(filled.sum())} frequencies with signal above noise.",
            "training images",
            "Use larger or less noisy training scans.",
        )
    middle = np.sqrt(edges[1:] * edges[:-1])[filled]
    level = sums[filled] / counts[filled]
    slope, offset = np.polyfit(np.log(middle), np.log(level), 1, w=np.sqrt(counts[filled]))
    exponent = max(0.0, float(-slope))
    at_corner = float(np.exp(offset) * lowest**-exponent)
    return Spectrum(level=0.5 * at_corner, corner=float(lowest), exponent=exponent)


def _boxes(
    shape: tuple[int, ...], size: tuple[int, int], mask: NDArray[np.bool_] | None
) -> list[tuple[Any, ...]]:
    """Tiles about half a tile apart that are at least half inside the mask."""
    starts = [
        np.linspace(0, n - own, -(-2 * (n - own) // own) + 1).round().astype(int)
        for n, own in zip(shape[1:], size, strict=True)
    ]
    found = []
    for plane in range(shape[0]):
        for u in starts[0]:
            for v in starts[1]:
                box = (plane, slice(u, u + size[0]), slice(v, v + size[1]))
                if mask is None or mask[box].mean() >= 0.5:
                    found.append(box)
    return found
