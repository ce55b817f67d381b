"""Small features of known size, as the acquisition itself would show them.

A feature is made from its closed-form Fourier transform, sampled to the k-space extent of the
voxel grid, so that it carries the blur and the ringing of the full acquisition and no more.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import QualityError
from mrics.numerics import centred_ifft

Array = NDArray[Any]
SHAPES = ("disc", "sphere", "line")
#: voxels of blur and ringing kept around a feature on each side
MARGIN = 4


@dataclass(frozen=True)
class Feature:
    """A feature to insert.

    Attributes
    ----------
    shape : str
        "disc" (in one plane), "sphere" (over planes) or "line" (in one plane).
    size_mm : float
        Diameter; for a line its width.
    contrast : float
        In per cent of the local signal; negative for a dark feature.
    length_mm : float
        Length of a line; 0 for five times its width.
    angle_deg : float
        Angle of a line against axis u, towards v.
    """

    shape: str = "disc"
    size_mm: float = 3.0
    contrast: float = 20.0
    length_mm: float = 0.0
    angle_deg: float = 0.0

    def __post_init__(self) -> None:
        if self.shape not in SHAPES:
            raise QualityError(
                f"Feature shape {self.shape!r} is not known.",
                "features, shape",
                f"Choose one of: {', '.join(SHAPES)}.",
            )
        if not self.size_mm > 0.0 or self.length_mm < 0.0 or not np.isfinite(self.contrast):
            raise QualityError(
                f"A feature of size {self.size_mm} mm, length {self.length_mm} mm and contrast "
                f"{self.contrast} % cannot be inserted.",
                "features",
                "Give a positive size in mm and a finite contrast in per cent.",
            )
        if self.contrast == 0.0:
            raise QualityError(
                "A feature of contrast 0 % cannot be retained.",
                "features, contrast",
                "Give a contrast other than 0.",
            )

    @property
    def extent_mm(self) -> tuple[float, float, float]:
        """Size of the box that holds it along (plane, u, v); 0 along plane for planar shapes."""
        if self.shape == "sphere":
            return (self.size_mm,) * 3
        if self.shape == "disc":
            return (0.0, self.size_mm, self.size_mm)
        angle = np.deg2rad(self.angle_deg)
        c, s = abs(np.cos(angle)), abs(np.sin(angle))
        return (
            0.0,
            float(self._length * c + self.size_mm * s),
            float(self._length * s + self.size_mm * c),
        )

    @property
    def _length(self) -> float:
        return self.length_mm or 5.0 * self.size_mm

    def radii(self, voxel_mm: tuple[float, float, float]) -> tuple[int, int, int]:
        """Voxels its patch reaches from the middle along (plane, u, v), blur included."""
        return tuple(  # type: ignore[return-value]
            0 if extent == 0.0 else int(np.ceil(0.5 * extent / step)) + MARGIN
            for extent, step in zip(self.extent_mm, voxel_mm, strict=True)
        )

    def patch(self, voxel_mm: tuple[float, float, float]) -> Array:
        """The feature of unit height on its patch, shape ``2 r + 1`` along each axis.

        Parameters
        ----------
        voxel_mm : tuple of float
            Voxel size along (plane, u, v).
        """
        radii = self.radii(voxel_mm)
        # A grid four times the patch: the ringing that wraps around it is below 1e-3.
        lengths = [1 if r == 0 else 4 * (2 * r + 1) for r in radii]
        k = np.meshgrid(
            *(
                np.zeros(1) if n == 1 else (np.arange(n) - n // 2) / (n * step)
                for n, step in zip(lengths, voxel_mm, strict=True)
            ),
            indexing="ij",
        )
        cell = np.prod([step for n, step in zip(lengths, voxel_mm, strict=True) if n > 1])
        kspace = self.transform(*k) / (cell * np.sqrt(np.prod(lengths)))
        axes = tuple(a for a, n in enumerate(lengths) if n > 1)
        image = centred_ifft(kspace.astype(np.complex128), axes).real
        middle = tuple(
            slice(n // 2 - r, n // 2 + r + 1) for n, r in zip(lengths, radii, strict=True)
        )
        return np.ascontiguousarray(image[middle])

    def transform(self, k_plane: Array, k_u: Array, k_v: Array) -> Array:
        """Fourier transform at spatial frequencies in cycles per mm; planar shapes ignore k_plane.

        Disc: Van de Walle et al. 2000. Sphere: Koay, Sarlls, Oezarslan 2007.
        """
        if self.shape == "line":
            angle = np.deg2rad(self.angle_deg)
            along = k_u * np.cos(angle) + k_v * np.sin(angle)
            across = k_v * np.cos(angle) - k_u * np.sin(angle)
            area = self._length * self.size_mm
            return np.asarray(area * np.sinc(self._length * along) * np.sinc(self.size_mm * across))
        radius = 0.5 * self.size_mm
        if self.shape == "disc":
            return disc_transform(radius, np.hypot(k_u, k_v))
        return _sphere_transform(radius, np.sqrt(k_plane**2 + k_u**2 + k_v**2))


def disc_transform(radius: float, k: Array) -> Array:
    """Transform of a disc of unit height, pi a^2 times 2 J1(x)/x with x = 2 pi a k."""
    from scipy.special import j1

    x = 2.0 * np.pi * radius * np.asarray(k)
    safe = np.where(x == 0.0, 1.0, x)
    return np.asarray(np.pi * radius**2 * np.where(x == 0.0, 1.0, 2.0 * j1(safe) / safe))


def _sphere_transform(radius: float, k: Array) -> Array:
    x = 2.0 * np.pi * radius * np.asarray(k)
    small = x < 1e-3
    safe = np.where(small, 1.0, x)
    shape = np.where(small, 1.0 - x**2 / 10.0, 3.0 * (np.sin(safe) - safe * np.cos(safe)) / safe**3)
    return np.asarray(4.0 / 3.0 * np.pi * radius**3 * shape)
