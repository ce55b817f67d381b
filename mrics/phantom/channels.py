"""Closed-form k-space seen by several channels, with sensitivities as sums of plane waves.

Where a sensitivity is S(r) = sum_m c_m exp(2 pi i q_m.r), the channel's k-space is
sum_m c_m F(k - q_m): as exact as the object's own F, and never rasterised (the sinusoidal model of
Guerquin-Kern et al. 2012, IEEE Trans Med Imaging 31:626-636). The waves repeat after twice the
field of view, so a smooth field that is not periodic over the field of view itself is fitted well,
and every shifted k lies on a grid of half steps where F is evaluated once.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import product
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from mrics.errors import MricsError
from mrics.phantom.ellipses import ClosedForm

Array = NDArray[Any]


@dataclass(frozen=True)
class WaveMaps:
    """Sensitivities that are sums of plane waves.

    Attributes
    ----------
    extent : tuple of float
        Field of view per axis; the waves' frequencies are n / (2 extent).
    coefficients : ndarray of complex128, shape (channel, 2 order + 1, ...)
        One axis per dimension after the channel, n from -order to order.
    """

    extent: tuple[float, ...]
    coefficients: NDArray[np.complex128]

    @property
    def order(self) -> int:
        """Highest n."""
        return self.coefficients.shape[1] // 2

    def value(self, r: ArrayLike) -> NDArray[np.complex128]:
        """Sensitivities at ``r`` of shape (..., dimension), as (channel, ...)."""
        r = np.asarray(r, dtype=np.float64)
        flat = _waves(r.reshape(-1, r.shape[-1]), self.extent, self.order)
        values = self.coefficients.reshape(len(self.coefficients), -1) @ flat.T
        return values.reshape(-1, *r.shape[:-1])


def _waves(points: Array, extent: Sequence[float], order: int) -> Array:
    """exp(2 pi i n.r / (2 extent)) as (point, wave)."""
    n = np.arange(-order, order + 1)
    total = np.ones((len(points), 1), dtype=np.complex128)
    for axis, size in enumerate(extent):
        one = np.exp(1j * np.pi * points[:, axis, None] * n / size)
        total = (total[:, :, None] * one[:, None, :]).reshape(len(points), -1)
    return total


def fit_waves(
    values: ArrayLike, points: ArrayLike, extent: Sequence[float], order: int = 5
) -> tuple[WaveMaps, float]:
    """Plane waves closest to sensitivities known at points.

    Parameters
    ----------
    values : array_like of shape (channel, point), complex
        Sensitivities.
    points : array_like of shape (point, dimension)
        Where they are known: the object's support, with at least as many points as waves.
    extent : sequence of float
        Field of view per axis, in the unit of ``points``.
    order : int
        Waves per axis are 2 order + 1.

    Returns
    -------
    maps : WaveMaps
    error : float
        RMS misfit relative to the RMS of ``values``.

    Raises
    ------
    MricsError
        Where there are fewer points than waves.
    """
    values = np.asarray(values, dtype=np.complex128)
    points = np.asarray(points, dtype=np.float64)
    waves = _waves(points, extent, order)
    if len(points) < waves.shape[1]:
        raise MricsError(
            f"{len(points)} points cannot fix {waves.shape[1]} waves.",
            "points, order",
            "Give more points or a lower order.",
        )
    # Waves over twice the field of view are nearly dependent on it: small singular values are cut.
    solution = np.linalg.lstsq(waves, values.T, rcond=1e-10)[0]
    error = np.linalg.norm(waves @ solution - values.T) / np.linalg.norm(values)
    shape = (len(values), *[2 * order + 1] * len(extent))
    return WaveMaps(tuple(extent), solution.T.reshape(shape)), float(error)


def channel_kspace(
    objects: Sequence[ClosedForm], maps: WaveMaps, shape: Sequence[int]
) -> NDArray[np.complex128]:
    """Centred k-space of closed-form objects in every channel.

    Parameters
    ----------
    objects : sequence
        Ellipses, ellipsoids or Gaussians; their sum is the object.
    maps : WaveMaps
        Sensitivities; the field of view is ``maps.extent``.
    shape : sequence of int
        Acquired matrix.

    Returns
    -------
    ndarray of shape (channel, *shape)
        Scaled like :func:`mrics.phantom.closed_form_kspace`.
    """
    order = maps.order
    axes = [
        (np.arange(2 * n + 2 * order) - 2 * (n // 2) - order) / (2.0 * size)
        for n, size in zip(shape, maps.extent, strict=True)
    ]
    k = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1)
    fine = np.zeros(k.shape[:-1], dtype=np.complex128)
    for item in objects:
        fine += item.transform(k)
    total = np.zeros((len(maps.coefficients), *shape), dtype=np.complex128)
    weights = maps.coefficients.reshape(len(total), -1)
    for number, wave in enumerate(product(range(2 * order + 1), repeat=len(shape))):
        # Index of k - q: 2 (k + N//2) + order - n, n = wave - order.
        window = tuple(
            slice(2 * order - n, 2 * order - n + 2 * count - 1, 2)
            for n, count in zip(wave, shape, strict=True)
        )
        total += weights[:, number].reshape(-1, *[1] * len(shape)) * fine[window]
    voxels = np.prod(maps.extent) / np.prod(shape)
    return total / (voxels * np.sqrt(np.prod(shape)))
