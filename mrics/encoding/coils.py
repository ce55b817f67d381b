"""A simulated receive array: circular loops around the field of view by Biot-Savart.

Used where a scan holds one combined image: its planes are multiplied by these sensitivities. What
was simulated is said in :attr:`Coils.note`, for the report.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from mrics.encoding.layout import covariance, cylinder, dome
from mrics.encoding.loops import loop_field
from mrics.errors import AcquisitionError
from mrics.phantom.fields import spline_weights
from mrics.scan.volume import LETTERS, Axes, Scan

Array = NDArray[Any]

FORMS = ("cylinder", "dome")
_LATTICE_MM = 4.0  # the field is computed on this lattice and splined between
_BEYOND = 0.15  # share of the field of view that the lattice reaches past each of its sides
_CONDUCTOR_MM = 10.0  # wires are rounded off by this: the field of view's corners may touch them


@dataclass(frozen=True)
class Coils:
    """Loops of a receive array and the sensitivities they give on a grid of planes.

    Attributes
    ----------
    shape : tuple of int
        (plane, channel, u, v).
    voxel_mm : tuple of 3 float
        Voxel size along (plane, u, v).
    centres_mm, normals : ndarray of shape (channel, 3)
        Loops in coordinates (plane, u, v), origin at index N//2 of every axis; the normals point
        at the bore's axis.
    radius_mm : float
        Radius of every loop.
    bore : int
        Which of (plane, u, v) lies along the static field.
    covariance : ndarray of shape (channel, channel)
        Noise covariance with a mean diagonal of 1.
    settings : dict
        What it was simulated with, for a results file.
    """

    shape: tuple[int, int, int, int]
    voxel_mm: tuple[float, float, float]
    centres_mm: NDArray[np.float64]
    normals: NDArray[np.float64]
    radius_mm: float
    bore: int
    covariance: NDArray[np.float64]
    settings: dict[str, Any] = field(default_factory=dict)

    @property
    def channels(self) -> int:
        """Number of loops."""
        return self.shape[1]

    @property
    def note(self) -> str:
        """One line for the report."""
        given = self.settings
        return (
            f"sensitivities simulated: {self.channels} loops of radius {self.radius_mm:.0f} mm on "
            f"a {given['form']}, {given['rows']} row{'s' if given['rows'] > 1 else ''}, standoff "
            f"{given['standoff_mm']:g} mm, noise correlation of neighbours "
            f"{given['correlation']:g}"
        )

    @property
    def sensitivities(self) -> SensitivityMaps:
        """Maps of unit norm, computed for the planes that are asked for: ``[start:stop]``."""
        return SensitivityMaps(self)

    def field_at(self, points_mm: ArrayLike) -> NDArray[np.complex128]:
        """Receive field of every loop at points, exact.

        The receive field is the component that turns against the spins' transmit field,
        B1- = (B1 - i B2)/2 for one ampere, 1 and 2 being the two axes across the bore (Hoult 2000,
        Concepts Magn Reson 12:173-187), and is scaled to a root-sum-of-squares of 1 at the origin.

        Parameters
        ----------
        points_mm : array_like of shape (..., 3)
            Coordinates (plane, u, v), origin at index N//2.

        Returns
        -------
        ndarray of shape (channel, ...)
        """
        points = np.asarray(points_mm, dtype=np.float64)
        exact: NDArray[np.complex128] = self._raw(points) / self._scale
        return exact

    def on_grid(self, plane_mm: Array, u_mm: Array, v_mm: Array) -> NDArray[np.complex64]:
        """Receive field on the grid spanned by three coordinate vectors, (channel, plane, u, v).

        As :meth:`field_at`, by the splines. Coordinates may reach past each side by 0.15 of the
        field of view.
        """
        return np.ascontiguousarray(self._splined(plane_mm, u_mm, v_mm).transpose(1, 0, 2, 3))

    @cached_property
    def _scale(self) -> float:
        return float(np.linalg.norm(self._raw(np.zeros((1, 3)))))

    @cached_property
    def _whitening(self) -> NDArray[np.float32]:
        return np.linalg.inv(np.linalg.cholesky(self.covariance)).astype(np.float32)

    def _raw(self, points: Array) -> NDArray[np.complex128]:
        first, second = (axis for axis in range(3) if axis != self.bore)
        out = np.empty((self.channels, *points.shape[:-1]), dtype=np.complex128)
        for number, (centre, normal) in enumerate(zip(self.centres_mm, self.normals, strict=True)):
            away = points - centre
            height = away @ normal
            across = away - height[..., None] * normal
            distance = np.linalg.norm(across, axis=-1)
            radial, axial = loop_field(distance, height, self.radius_mm, conductor_mm=_CONDUCTOR_MM)
            unit = radial / np.where(distance > 0, distance, 1.0)
            one = axial * normal[first] + unit * across[..., first]
            two = axial * normal[second] + unit * across[..., second]
            out[number] = 0.5 * (one - 1j * two)
        return out

    @cached_property
    def _lattice(self) -> tuple[NDArray[np.float64], list[Array], NDArray[np.float32]]:
        """First point and step of the lattice along each axis, spline coefficients.

        Coefficients are (plane, channel, part, u, v) with real and imaginary part apart, so that
        evaluation is a chain of real matrix products.
        """
        from scipy.ndimage import spline_filter

        axes, starts = [], []
        for count, step in zip((self.shape[0], *self.shape[2:]), self.voxel_mm, strict=True):
            low = -(count // 2) * step - _BEYOND * count * step - 3 * _LATTICE_MM
            high = (count - count // 2) * step + _BEYOND * count * step + 3 * _LATTICE_MM
            axes.append(low + _LATTICE_MM * np.arange(int(np.ceil((high - low) / _LATTICE_MM)) + 1))
            starts.append(low)
        values = np.empty((len(axes[0]), self.channels, 2, len(axes[1]), len(axes[2])), np.float32)
        for row, plane in enumerate(axes[0]):
            points = np.stack(np.meshgrid([plane], axes[1], axes[2], indexing="ij"), axis=-1)[0]
            exact = self.field_at(points)
            values[row, :, 0], values[row, :, 1] = exact.real, exact.imag
        for channel in range(self.channels):
            for part in range(2):
                block = values[:, channel, part]
                values[:, channel, part] = spline_filter(block, order=3, output=np.float32)
        return np.asarray(starts), axes, values

    def _splined(self, plane_mm: Array, u_mm: Array, v_mm: Array) -> NDArray[np.complex64]:
        """Spline values (plane, channel, u, v)."""
        starts, axes, values = self._lattice
        weights = []
        for axis, given in enumerate((plane_mm, u_mm, v_mm)):
            place = (np.ravel(given) - starts[axis]) / _LATTICE_MM
            if place.min() < 1 or place.max() > len(axes[axis]) - 3:
                raise AcquisitionError(
                    f"Points from {np.min(given):g} to {np.max(given):g} mm lie outside the "
                    "array's grid.",
                    f"axis {('plane', 'u', 'v')[axis]}",
                    "Simulate the coils for a field of view that holds them.",
                )
            weights.append(spline_weights(place))
        (down, rows), (along, rows_u), (across, rows_v) = weights
        part = values[rows, :, :, rows_u, rows_v]
        _, channels, _, n_u, n_v = part.shape
        part = (down @ part.reshape(part.shape[0], -1)).reshape(-1, n_u, n_v)
        part = np.matmul(np.matmul(along.toarray(), part), across.toarray().T)
        part = part.reshape(-1, channels, 2, *part.shape[1:])
        out = np.empty((*part.shape[:2], *part.shape[3:]), np.complex64)
        out.real, out.imag = part[:, :, 0], part[:, :, 1]
        return out


class SensitivityMaps:
    """Sensitivities of a :class:`Coils`, an array in all but memory.

    Slicing the plane axis computes those planes: ``maps[4:8]`` is an ndarray (4, channel, u, v),
    complex64. Every voxel is scaled to s^H Psi^-1 s = 1, so that a combined scan's own shading is
    kept and the noise level of a fully sampled acquisition is that of the scan.
    """

    dtype = np.dtype(np.complex64)
    ndim = 4

    def __init__(self, coils: Coils) -> None:
        self._coils = coils

    @property
    def shape(self) -> tuple[int, int, int, int]:
        """(plane, channel, u, v)."""
        return self._coils.shape

    def __len__(self) -> int:
        return self.shape[0]

    @property
    def nbytes(self) -> int:
        """Bytes of all planes at once."""
        return int(np.prod(self.shape)) * self.dtype.itemsize

    def __getitem__(self, key: Any) -> NDArray[np.complex64]:
        planes, rest = (key[0], key[1:]) if isinstance(key, tuple) else (key, ())
        single = isinstance(planes, int | np.integer)
        chosen = np.atleast_1d(np.arange(self.shape[0])[planes])
        coils = self._coils
        steps = zip((self.shape[0], *self.shape[2:]), coils.voxel_mm, strict=True)
        plane, u, v = ((np.arange(n) - n // 2) * step for n, step in steps)
        maps = coils._splined(plane[chosen], u, v)
        maps /= _norm(maps, coils._whitening)[:, None]
        part: NDArray[np.complex64] = maps[0][rest] if single else maps[(slice(None), *rest)]
        return part

    def __array__(self, dtype: Any = None, copy: bool | None = None) -> Array:
        whole = self[:]
        return whole if dtype is None else whole.astype(dtype)


def _norm(maps: Array, whitening: Array) -> Array:
    """Root of s^H Psi^-1 s over the channel axis 1."""
    if not np.array_equal(whitening, np.eye(len(whitening))):
        count, channels, a, b = maps.shape
        maps = np.matmul(whitening, maps.reshape(count, channels, a * b)).reshape(maps.shape)
    return np.sqrt(np.einsum("pcuv,pcuv->puv", maps, maps.conj()).real)


def simulate_coils(
    shape: Sequence[int],
    voxel_mm: Sequence[float],
    *,
    number: int = 8,
    rows: int = 1,
    radius_mm: float | None = None,
    standoff_mm: float = 30.0,
    correlation: float = 0.0,
    form: str = "cylinder",
    bore: int = 0,
) -> Coils:
    """Circular loops around a field of view and their receive sensitivities.

    Parameters
    ----------
    shape : sequence of 3 int
        Stack of planes (plane, u, v).
    voxel_mm : sequence of 3 float
        Voxel size along (plane, u, v).
    number : int
        Loops in all, from 1 up.
    rows : int
        Rings of loops along the bore (cylinder only), neighbours turned by half a loop.
    radius_mm : float, optional
        Loop radius; default: neighbours overlap to the point where they do not couple.
    standoff_mm : float
        Distance of the loops from the ellipse inscribed in the field of view, in mm.
    correlation : float
        Noise correlation of nearest neighbours, from 0 up to below 1.
    form : {"cylinder", "dome"}
        Elliptic cylinder open at both ends, or half an ellipsoid closed at the bore's high end.
    bore : {0, 1, 2}
        Which of (plane, u, v) lies along the static field: loops stand around this axis.

    Returns
    -------
    Coils
        Its ``sensitivities`` are computed plane block by plane block.

    Raises
    ------
    AcquisitionError
        Where a setting is out of range, or the covariance is not positive definite.
    """
    _check(shape, voxel_mm, number, rows, radius_mm, standoff_mm, correlation, form, bore)
    extent = np.array([n * step for n, step in zip(shape, voxel_mm, strict=True)])
    half = extent / 2.0 + standoff_mm
    across = [axis for axis in range(3) if axis != bore]
    if form == "cylinder":
        centres, normals, size = cylinder(number, rows, half[across], radius_mm)
    else:
        centres, normals, size = dome(number, half[[*across, bore]], radius_mm)
    turned_centres, turned_normals = np.empty_like(centres), np.empty_like(normals)
    for target, source in ((turned_centres, centres), (turned_normals, normals)):
        target[:, across], target[:, bore] = source[:, :2], source[:, 2]
    return Coils(
        shape=(int(shape[0]), number, int(shape[1]), int(shape[2])),
        voxel_mm=(float(voxel_mm[0]), float(voxel_mm[1]), float(voxel_mm[2])),
        centres_mm=turned_centres,
        normals=turned_normals,
        radius_mm=size,
        bore=bore,
        covariance=covariance(turned_centres, correlation),
        settings={
            "form": form,
            "number": number,
            "rows": rows,
            "radius_mm": size,
            "standoff_mm": float(standoff_mm),
            "correlation": float(correlation),
            "bore": bore,
        },
    )


def coils_for_scan(scan: Scan, axes: Axes, **settings: Any) -> Coils:
    """:func:`simulate_coils` on the planes of a scan, the bore along the patient's long axis.

    Parameters
    ----------
    scan : Scan
        Gives grid, voxel size and affine; the file axis closest to world z (head-foot, along the
        static field of a closed magnet) becomes the bore.
    axes : Axes
        How the scan's axes are encoded.
    **settings
        Of :func:`simulate_coils`, without ``shape``, ``voxel_mm`` and ``bore``.
    """
    directions = np.abs(scan.affine[2, :3]) / np.linalg.norm(scan.affine[:3, :3], axis=0)
    letter = LETTERS[int(np.argmax(directions))]
    order = axes.order
    bore = [axes.plane, axes.u, axes.v].index(letter)
    shape = [scan.shape[axis] for axis in order]
    return simulate_coils(shape, [scan.voxel_mm[axis] for axis in order], bore=bore, **settings)


def _check(
    shape: Sequence[int],
    voxel_mm: Sequence[float],
    number: int,
    rows: int,
    radius_mm: float | None,
    standoff_mm: float,
    correlation: float,
    form: str,
    bore: int,
) -> None:
    wrong = (
        (len(shape) != 3 or min(shape) < 1, f"shape {tuple(shape)}", "three lengths (plane, u, v)"),
        (len(voxel_mm) != 3 or not min(voxel_mm) > 0, f"voxel_mm {tuple(voxel_mm)}", "three sizes"),
        (number < 1, f"number {number}", "at least one loop"),
        (not 1 <= rows <= number, f"rows {rows}", f"from 1 to the number of loops, {number}"),
        (form == "dome" and rows != 1, f"rows {rows} on a dome", "rows on a cylinder only"),
        (form not in FORMS, f"form {form!r}", " or ".join(FORMS)),
        (radius_mm is not None and not radius_mm > 0, f"radius_mm {radius_mm}", "above 0"),
        (not standoff_mm >= 0, f"standoff_mm {standoff_mm}", "from 0 up"),
        (not 0 <= correlation < 1, f"correlation {correlation}", "from 0 up to below 1"),
        (bore not in (0, 1, 2), f"bore {bore}", "0, 1 or 2 for plane, u or v"),
    )
    for bad, what, allowed in wrong:
        if bad:
            raise AcquisitionError(
                f"Coils cannot be simulated with {what}.", "coils", f"Give {allowed}."
            )
