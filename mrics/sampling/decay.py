"""What T2 decay along the echo train does to k-space and to a point."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mrics.errors import PatternError
from mrics.sampling.grid import Field, Mask, signed_indices
from mrics.sampling.pattern import Pattern

_COARSE, _FINE = 16, 64


@dataclass(frozen=True)
class DecaySpread:
    """Point spread under decay along the train, all positions the shutter lets through filled in.

    Attributes
    ----------
    width : tuple of float
        Full width at half maximum of the magnitude point spread along each phase-encode axis, in
        voxels. The magnitude overstates blur (Chaimow and Shmuel 2017): edges in an image blur
        with the real part.
    side_lobe : tuple of float
        Largest magnitude beyond the main lobe along each axis, relative to the peak. Where the
        first echoes lie at the rim of k-space the main lobe narrows and the side lobes rise.
    width_without, side_lobe_without : tuple of float
        The same without decay.
    signal : float
        Peak of the point spread relative to no decay: mean of exp(-t/T2) over k-space.
    """

    width: tuple[float, ...]
    side_lobe: tuple[float, ...]
    width_without: tuple[float, ...]
    side_lobe_without: tuple[float, ...]
    signal: float

    @property
    def broadening(self) -> tuple[float, ...]:
        """Width with decay / width without."""
        return tuple(a / b for a, b in zip(self.width, self.width_without, strict=True))


def decay_spread(
    pattern: Pattern, times_ms: NDArray[np.float64], t2_ms: float, frame: int = 0
) -> DecaySpread:
    """Width of a point under decay, free of what undersampling itself does to it.

    Positions left out get the time of the nearest acquired one, so that the decay over k-space is
    seen alone.

    Parameters
    ----------
    pattern : Pattern
        With its order.
    times_ms : ndarray of shape (train_length,)
        Time of every echo after the excitation.
    t2_ms : float
        T2, or T2* for echo-planar trains.
    frame : int
        Which frame.

    Raises
    ------
    PatternError
        For a pattern without order, or a T2 that is not above 0.
    """
    from scipy.ndimage import distance_transform_edt

    time, mask = _times(pattern, times_ms, t2_ms, frame)
    nearest = distance_transform_edt(~mask, return_distances=False, return_indices=True)
    filled = np.exp(-time[tuple(nearest)] / t2_ms)
    flat = np.ones(pattern.grid) if pattern.shutter is None else pattern.shutter.astype(float)
    filled *= flat
    width, side_lobe = zip(*(_lobes(filled, axis) for axis in range(filled.ndim)), strict=True)
    flat_width, flat_lobe = zip(*(_lobes(flat, axis) for axis in range(flat.ndim)), strict=True)
    return DecaySpread(
        width=width,
        side_lobe=side_lobe,
        width_without=flat_width,
        side_lobe_without=flat_lobe,
        signal=float(filled.sum() / flat.sum()),
    )


def _times(
    pattern: Pattern, times_ms: NDArray[np.float64], t2_ms: float, frame: int
) -> tuple[Field, Mask]:
    """Time of every acquired position of a frame, and its mask."""
    if pattern.order is None:
        raise PatternError(
            "The pattern has no order of acquisition.", "order", "Order it by order_pattern."
        )
    if not (np.isfinite(t2_ms) and t2_ms > 0):
        raise PatternError(f"T2 = {t2_ms!r} ms is not above 0.", "t2_ms", "Give T2 in ms.")
    before = int(pattern.mask[:frame].sum()) if pattern.frames else 0
    mask = pattern.mask[frame] if pattern.frames else pattern.mask
    time = np.zeros(mask.shape)
    time[mask] = times_ms[pattern.order[before : before + int(mask.sum()), 1]]
    return time, mask


def _lobes(weights: Field, axis: int) -> tuple[float, float]:
    """Full width at half maximum in voxels, and largest side lobe, of the magnitude along an axis.

    The profile through the point is the transform of the weights summed over the other axes; it is
    evaluated at 16 points a voxel over half the field of view, then finely at the half maximum.
    """
    others = tuple(a for a in range(weights.ndim) if a != axis)
    line = weights.sum(axis=others)
    k = signed_indices(line.size) / line.size

    def size(x: NDArray[np.float64]) -> Field:
        return np.asarray(np.abs(np.exp(2j * np.pi * x[:, None] * k) @ line) / line.sum())

    x = np.arange(_COARSE * (line.size // 2) + 1) / _COARSE
    coarse = size(x)
    rising = np.flatnonzero(np.diff(coarse) > 0)
    lobe = float(coarse[rising[0] :].max()) if rising.size else 0.0
    below = np.flatnonzero(coarse < 0.5)
    if not below.size:
        return float(line.size), lobe
    fine = np.linspace(x[below[0] - 1], x[below[0]], _FINE + 1)
    near = size(fine)
    at = int(np.flatnonzero(near < 0.5)[0])
    part = (near[at - 1] - 0.5) / (near[at - 1] - near[at])
    return float(2 * (fine[at - 1] + part * (fine[1] - fine[0]))), lobe
