"""Closed-form k-space of ellipses, ellipsoids and Gaussians: objects that are never rasterised.

Spatial frequency k is in cycles per unit of length (mm where the object is in mm) and
F(k) = integral f(r) exp(-2 pi i k.r) dr. Data sampled from these formulas hold the Gibbs ringing
of a real acquisition, where the transform of a raster would flatter every recovery.

References
----------
Van de Walle et al. 2000, IEEE Trans Med Imaging 19 (ellipses); Koay, Sarlls, Oezarslan 2007, Magn
Reson Med 58:430-436 (ellipsoids); Guerquin-Kern et al. 2012, IEEE Trans Med Imaging 31 (why).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[Any]


class ClosedForm(Protocol):
    """An object whose transform is known."""

    def transform(self, k: ArrayLike) -> Array:
        """F at ``k`` of shape (..., dimension), in cycles per unit length."""

    def value(self, r: ArrayLike) -> Array:
        """The object at ``r`` of shape (..., dimension)."""


@dataclass(frozen=True)
class Ellipse:
    """A filled ellipse.

    Attributes
    ----------
    half_axes : tuple of 2 float
        Half-axes along the ellipse's own first and second axis, positive.
    centre : tuple of 2 float
        Centre.
    degrees : float
        Rotation of the first axis from the first coordinate towards the second.
    amplitude : complex
        Value inside.
    """

    half_axes: tuple[float, float]
    centre: tuple[float, float] = (0.0, 0.0)
    degrees: float = 0.0
    amplitude: complex = 1.0

    def _turn(self) -> Array:
        angle = np.deg2rad(self.degrees)
        return np.array([[np.cos(angle), np.sin(angle)], [-np.sin(angle), np.cos(angle)]])

    def transform(self, k: ArrayLike) -> Array:
        """F(k) = A a b J1(2 pi K) / K exp(-2 pi i k.r0), K = |(a u, b v)| in the ellipse's axes."""
        k = np.asarray(k, dtype=np.float64)
        scaled = np.linalg.norm((k @ self._turn().T) * self.half_axes, axis=-1)
        shape = float(np.prod(self.half_axes)) * _disc(scaled)
        return self.amplitude * shape * _shift(k, self.centre)

    def value(self, r: ArrayLike) -> Array:
        """Amplitude inside, 0 outside."""
        own = ((np.asarray(r, dtype=np.float64) - self.centre) @ self._turn().T) / self.half_axes
        return np.where(np.sum(own**2, axis=-1) <= 1.0, self.amplitude, 0.0)


@dataclass(frozen=True)
class Ellipsoid:
    """A filled ellipsoid.

    Attributes
    ----------
    half_axes : tuple of 3 float
        Half-axes along the ellipsoid's own axes, positive.
    centre : tuple of 3 float
        Centre.
    rotation : tuple of 3 tuples of 3 float
        Rows are the ellipsoid's own axes in coordinates (an orthogonal matrix).
    amplitude : complex
        Value inside.
    """

    half_axes: tuple[float, float, float]
    centre: tuple[float, float, float] = (0.0, 0.0, 0.0)
    rotation: tuple[tuple[float, ...], ...] = ((1.0, 0.0, 0.0), (0.0, 1.0, 0.0), (0.0, 0.0, 1.0))
    amplitude: complex = 1.0

    def transform(self, k: ArrayLike) -> Array:
        """F(k) = A abc (sin q - q cos q) / (2 pi^2 K^3) exp(-2 pi i k.r0), q = 2 pi K."""
        k = np.asarray(k, dtype=np.float64)
        scaled = np.linalg.norm((k @ np.asarray(self.rotation).T) * self.half_axes, axis=-1)
        shape = float(np.prod(self.half_axes)) * _ball(scaled)
        return self.amplitude * shape * _shift(k, self.centre)

    def value(self, r: ArrayLike) -> Array:
        """Amplitude inside, 0 outside."""
        own = np.asarray(r, dtype=np.float64) - self.centre
        own = (own @ np.asarray(self.rotation).T) / self.half_axes
        return np.where(np.sum(own**2, axis=-1) <= 1.0, self.amplitude, 0.0)


@dataclass(frozen=True)
class Gaussian:
    """A round Gaussian A exp(-|r - r0|^2 / (2 s^2)) in as many dimensions as ``centre`` has.

    Attributes
    ----------
    sd : float
        Standard deviation s, positive.
    centre : tuple of float
        Centre.
    amplitude : complex
        Value at the centre.
    """

    sd: float
    centre: tuple[float, ...] = (0.0, 0.0)
    amplitude: complex = 1.0

    def transform(self, k: ArrayLike) -> Array:
        """F(k) = A (2 pi s^2)^(d/2) exp(-2 pi^2 s^2 k^2) exp(-2 pi i k.r0)."""
        k = np.asarray(k, dtype=np.float64)
        peak = (2.0 * np.pi * self.sd**2) ** (len(self.centre) / 2.0)
        shape = peak * np.exp(-2.0 * np.pi**2 * self.sd**2 * np.sum(k**2, axis=-1))
        return self.amplitude * shape * _shift(k, self.centre)

    def value(self, r: ArrayLike) -> Array:
        """The Gaussian at ``r``."""
        away = np.asarray(r, dtype=np.float64) - self.centre
        return self.amplitude * np.exp(-np.sum(away**2, axis=-1) / (2.0 * self.sd**2))


def _shift(k: Array, centre: Sequence[float]) -> Array:
    return np.exp(-2j * np.pi * (k @ np.asarray(centre, dtype=np.float64)))


def _disc(k: Array) -> Array:
    """Transform of the unit disc, J1(2 pi K) / K."""
    from scipy.special import j1

    safe = np.where(k > 1e-8, k, 1.0)
    return np.where(k > 1e-8, j1(2.0 * np.pi * safe) / safe, np.pi)


def _ball(k: Array) -> Array:
    """Transform of the unit ball; a series where the closed form would cancel."""
    q = 2.0 * np.pi * k
    safe = np.where(q > 0.05, q, 1.0)
    closed = 3.0 * (np.sin(safe) - safe * np.cos(safe)) / safe**3
    series = 1.0 - q**2 / 10.0 + q**4 / 280.0 - q**6 / 15120.0
    return 4.0 / 3.0 * np.pi * np.where(q > 0.05, closed, series)


# Shepp & Logan 1974, IEEE Trans Nucl Sci NS-21(3):21-43, as tabulated by Toft 1996 (thesis, table
# B.3): half-axes, centre, degrees, original amplitude, contrast-modified amplitude. Copies in
# circulation differ in the small ones; this project uses exactly this table.
_SHEPP_LOGAN = (
    (0.69, 0.92, 0.0, 0.0, 0.0, 2.0, 1.0),
    (0.6624, 0.8740, 0.0, -0.0184, 0.0, -0.98, -0.8),
    (0.11, 0.31, 0.22, 0.0, -18.0, -0.02, -0.2),
    (0.16, 0.41, -0.22, 0.0, 18.0, -0.02, -0.2),
    (0.21, 0.25, 0.0, 0.35, 0.0, 0.01, 0.1),
    (0.046, 0.046, 0.0, 0.1, 0.0, 0.01, 0.1),
    (0.046, 0.046, 0.0, -0.1, 0.0, 0.01, 0.1),
    (0.046, 0.023, -0.08, -0.605, 0.0, 0.01, 0.1),
    (0.023, 0.023, 0.0, -0.605, 0.0, 0.01, 0.1),
    (0.023, 0.046, 0.06, -0.605, 0.0, 0.01, 0.1),
)


def shepp_logan(*, modified: bool = True, scale: float = 1.0) -> tuple[Ellipse, ...]:
    """The ten ellipses of the Shepp-Logan head on the square [-scale, scale]^2, y up.

    Parameters
    ----------
    modified : bool
        Contrast-modified amplitudes (Toft 1996) instead of the original ones.
    scale : float
        Length that the table's unit stands for, for example half a field of view in mm.
    """
    return tuple(
        Ellipse((a * scale, b * scale), (x * scale, y * scale), phi, toft if modified else first)
        for a, b, x, y, phi, first, toft in _SHEPP_LOGAN
    )


def frequencies(shape: Sequence[int], voxel: Sequence[float]) -> Array:
    """Centred k grid of an acquisition, shape (*shape, dimension), cycles per unit of ``voxel``.

    The step is 1 / (N dx) along each axis and zero frequency is at index N//2.
    """
    axes = [(np.arange(n) - n // 2) / (n * dx) for n, dx in zip(shape, voxel, strict=True)]
    return np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1)


def positions(shape: Sequence[int], voxel: Sequence[float]) -> Array:
    """Voxel centres, shape (*shape, dimension); the origin is at index N//2."""
    axes = [(np.arange(n) - n // 2) * dx for n, dx in zip(shape, voxel, strict=True)]
    return np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1)


def closed_form_kspace(
    objects: Sequence[ClosedForm], shape: Sequence[int], voxel: Sequence[float]
) -> Array:
    """What a scanner would sample of these objects: centred k-space in this project's scaling.

    Parameters
    ----------
    objects : sequence
        Ellipses, ellipsoids or Gaussians of one dimension; their sum is the object.
    shape : sequence of int
        Acquired matrix.
    voxel : sequence of float
        Voxel size per axis, in the objects' unit of length.

    Returns
    -------
    ndarray of complex128, shape ``shape``
        Its centred orthonormal inverse transform is the object at finite resolution, ringing
        included, in the objects' own amplitude.
    """
    k = frequencies(shape, voxel)
    total = np.zeros(tuple(shape), dtype=np.complex128)
    for item in objects:
        total += item.transform(k)
    return total / (np.prod(voxel) * np.sqrt(np.prod(shape)))
