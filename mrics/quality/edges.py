"""Edge blur: 10 to 90 % rise of edges in the reference and in the recovered image."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import QualityError
from mrics.numerics import centred_fft, centred_ifft
from mrics.quality._inputs import as_stack
from mrics.quality.sites import smoothed
from mrics.quality.widths import edge_widths

Array = NDArray[Any]
#: twice as fine, a cubic spline follows the complex image to a few parts in a thousand
_FINE = 2
_STEP = 0.125
_MARGIN = 8


@dataclass(frozen=True)
class Edge:
    """An edge that a user points out in a scan.

    Attributes
    ----------
    i, j, k : float
        Voxel of the file, counted from 0.
    angle_deg : float
        Direction across the edge, in mm: 0 along the phase axis, 90 along the other axis of the
        encoded plane (readout in 2-D, partition in 3-D).
    scan : str
        Label of the scan it lies in; every scan where empty.
    """

    i: float
    j: float
    k: float
    angle_deg: float
    scan: str = ""


@dataclass(frozen=True)
class EdgeBlur:
    """Edges measured in two images.

    Attributes
    ----------
    edges : ndarray of shape (n, 4)
        Plane, u, v in voxels and the angle in degrees of the direction across the edge (in mm,
        against axis u, towards v), as given or found.
    width_mm, reference_mm : ndarray of shape (n,)
        10 to 90 % rise in the recovered image and in the reference; NaN where there is none.
    ratio : float
        Median of ``width_mm / reference_mm``.
    """

    edges: Array
    width_mm: Array
    reference_mm: Array
    ratio: float


def edge_blur(
    image: Array,
    reference: Array,
    voxel_mm: tuple[float, float],
    *,
    mask: NDArray[np.bool_] | None = None,
    edges: Array | None = None,
    count: int = 24,
    reach_mm: float | None = None,
) -> EdgeBlur:
    """Measure how much wider edges are in the recovered image.

    Profiles of the magnitude are taken across each edge from the complex image, zero-filled to a
    grid twice as fine and then interpolated by cubic splines, and averaged over three lines half a
    voxel apart.

    Parameters
    ----------
    image, reference : ndarray of shape (u, v) or (plane, u, v)
    voxel_mm : tuple of float
        Voxel size along u and v.
    mask : ndarray of bool, same shape, optional
        Where automatic edges are looked for.
    edges : ndarray of shape (n, 4), optional
        Edges to measure: plane, u, v, angle. Found in the reference if left out: strongest
        gradients, apart from each other, with flat ground on both sides.
    count : int
        Edges looked for.
    reach_mm : float, optional
        Half length of a profile; 6 voxels of the smaller side if left out.

    Raises
    ------
    QualityError
        Where no edge is found or given, or a given edge lies outside the stack.
    """
    stack, ref, inside = as_stack(image, reference, mask)
    smaller = min(voxel_mm)
    reach = 6.0 * smaller if reach_mm is None else float(reach_mm)
    if edges is None:
        chosen = _find(ref, inside, voxel_mm, count, reach)
    else:
        chosen = np.asarray(edges, dtype=np.float64).reshape(-1, 4)
        limits = np.array(stack.shape) - 1
        if ((chosen[:, :3] < 0) | (chosen[:, :3] > limits)).any():
            raise QualityError(
                f"An edge lies outside a stack of shape {stack.shape}.",
                "edges (plane, u, v, angle)",
                "Give voxel positions inside the stack.",
            )
    if not len(chosen):
        raise QualityError(
            "No edge with flat ground on both sides was found in the reference.",
            "edges",
            "Give edges as (plane, u, v, angle), or a larger mask.",
        )
    widths = [_widths(volume, chosen, voxel_mm, reach) for volume in (stack, ref)]
    known = np.isfinite(widths[0]) & np.isfinite(widths[1])
    ratio = float(np.median(widths[0][known] / widths[1][known])) if known.any() else float("nan")
    return EdgeBlur(chosen, widths[0], widths[1], ratio)


def zero_fill(plane: Array, factor: int) -> Array:
    """A plane on a grid ``factor`` times as fine, by padding its k-space with zeros.

    Sample ``factor * n`` of the result is sample n of the plane.
    """
    kspace = centred_fft(plane.astype(np.result_type(plane, np.complex64)))
    fine = np.zeros(tuple(factor * n for n in plane.shape), dtype=kspace.dtype)
    box = tuple(slice(factor * n // 2 - n // 2, factor * n // 2 - n // 2 + n) for n in plane.shape)
    fine[box] = kspace * factor
    image = centred_ifft(fine)
    # Both grids have their middle at N//2, which for odd N is not factor times the other.
    shift = [factor * (n // 2) - factor * n // 2 for n in plane.shape]
    return np.roll(image, shift, axis=(0, 1))


def _widths(stack: Array, edges: Array, voxel_mm: tuple[float, float], reach: float) -> Array:
    from scipy.ndimage import map_coordinates, spline_filter

    step = _STEP * min(voxel_mm)
    along = np.arange(-reach, reach + step / 2, step)
    profiles = np.empty((len(edges), along.size))
    for plane in np.unique(edges[:, 0]).astype(int):
        mine = np.flatnonzero(edges[:, 0] == plane)
        fine = zero_fill(stack[plane], _FINE)
        # Only around the edges; what a spline's coefficients see beyond fades within the margin.
        far = np.array([reach / step + _MARGIN for step in voxel_mm])
        low = np.maximum(0, edges[mine, 1:3].min(axis=0) - far).astype(int) * _FINE
        high = (edges[mine, 1:3].max(axis=0) + far + 1).astype(int) * _FINE
        fine = fine[low[0] : high[0], low[1] : high[1]]
        # Spline coefficients once for all lines of the plane; of the complex image, which is
        # band-limited as its magnitude is not.
        real = np.isrealobj(stack)
        kind = np.float64 if real else np.complex128
        spline = spline_filter(fine.real if real else fine, order=3, output=kind)
        for row in mine:
            _, u, v, angle = edges[row]
            across = np.array([np.cos(np.deg2rad(angle)), np.sin(np.deg2rad(angle))])
            beside = np.array([-across[1], across[0]])
            lines = []
            for offset in (-0.5, 0.0, 0.5):
                at = along[:, None] * across + offset * min(voxel_mm) * beside
                place = (np.array([u, v]) + at / np.array(voxel_mm)) * _FINE - low
                line = map_coordinates(spline, place.T, order=3, mode="nearest", prefilter=False)
                lines.append(line if real else np.abs(line))
            profiles[row] = np.mean(lines, axis=0)
    return edge_widths(profiles, step)


def _find(
    reference: Array,
    mask: NDArray[np.bool_] | None,
    voxel_mm: tuple[float, float],
    count: int,
    reach: float,
) -> Array:
    """Strongest edges, a profile's length apart, whose profile has flat ends and one rise."""
    from scipy.ndimage import maximum_filter

    smooth = smoothed(np.abs(reference).astype(np.float64), 0.7)
    slope_u, slope_v = (
        np.gradient(smooth, step, axis=axis) for axis, step in ((1, voxel_mm[0]), (2, voxel_mm[1]))
    )
    strength = np.hypot(slope_u, slope_v)
    if mask is not None:
        strength = np.where(mask, strength, 0.0)
    margin = [int(np.ceil(reach / step)) + 1 for step in voxel_mm]
    allowed = np.zeros(strength.shape, dtype=bool)
    allowed[:, margin[0] : -margin[0], margin[1] : -margin[1]] = True
    crest = allowed & (strength > 0.0) & (strength == maximum_filter(strength, (1, 5, 5)))
    candidates = np.argwhere(crest)
    order = np.argsort(strength[crest], kind="stable")[::-1]
    found: list[Array] = []
    for plane, u, v in candidates[order]:
        if len(found) == count:
            break
        edge = np.array(
            [plane, u, v, np.rad2deg(np.arctan2(slope_v[plane, u, v], slope_u[plane, u, v]))]
        )
        near = [
            other
            for other in found
            if other[0] == plane
            and np.hypot(*((other[1:3] - edge[1:3]) * np.array(voxel_mm))) < reach
        ]
        if not near and _clean(smooth[plane], edge, voxel_mm, reach):
            found.append(edge)
    return np.array(found).reshape(-1, 4)


def _clean(plane: Array, edge: Array, voxel_mm: tuple[float, float], reach: float) -> bool:
    """Whether a profile rises once, between ends that vary by less than a fifth of the rise."""
    from scipy.ndimage import map_coordinates

    _, u, v, angle = edge
    across = np.array([np.cos(np.deg2rad(angle)), np.sin(np.deg2rad(angle))])
    along = np.linspace(-reach, reach, 25)
    place = np.array([u, v])[:, None] + across[:, None] * along / np.array(voxel_mm)[:, None]
    profile = map_coordinates(plane, place, order=1, mode="nearest")
    ends = [profile[:7], profile[-7:]]
    rise = float(ends[1].mean() - ends[0].mean())
    return rise > 0.0 and max(float(np.ptp(end)) for end in ends) < 0.2 * rise
