"""The fully sampled centre of k-space: where it is, and its samples."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding.acquisition import Acquisition
from mrics.errors import AcquisitionError

Array = NDArray[Any]


def calibration_box(acquisition: Acquisition) -> tuple[slice, slice]:
    """Where the calibration region lies on the centred (u, v) grid.

    Its size is the acquisition's ``calibration``; where that is not stated, the largest fully
    sampled box around zero frequency that all patterns share. Along a full readout it is the
    whole axis.

    Raises
    ------
    AcquisitionError
        Where a stated region is not fully sampled, or there is none at all.
    """
    shared: NDArray[np.bool_] = np.asarray(acquisition.mask.all(axis=0))
    grid = acquisition.shape[1:]
    axes = 1 if shared.shape[1] == 1 else 2
    sizes = tuple(int(n) for n in acquisition.calibration[:axes])
    if len(sizes) < axes or not all(sizes):
        sizes = _largest_box(shared, axes)
    box = [_centred(grid[axis], size) for axis, size in enumerate(sizes)]
    inside = shared[box[0], :] if axes == 1 else shared[box[0], box[1]]
    if not inside.all():
        missing = np.argwhere(~inside)
        first = tuple(int(i) + b.start for i, b in zip(missing[0], box, strict=False))
        raise AcquisitionError(
            f"The calibration region of {' x '.join(map(str, sizes))} positions is undersampled: "
            f"{len(missing)} of {inside.size} positions are missing, the first at index "
            f"{first[0] if axes == 1 else first}.",
            "mask, calibration region",
            "State the region that was fully sampled, or acquire a calibration region.",
        )
    if axes == 1:
        return box[0], slice(0, grid[1])
    return box[0], box[1]


def calibration_samples(
    acquisition: Acquisition,
    planes: slice | None = None,
    *,
    box: tuple[slice, slice] | None = None,
    square: bool = False,
) -> Array:
    """Centred samples of the calibration region, as measured.

    Parameters
    ----------
    acquisition : Acquisition
        The data.
    planes : slice, optional
        Planes to read; all of them if left out.
    box : tuple of slice, optional
        Region, default :func:`calibration_box`.
    square : bool
        Cut a full readout to the length of the region along u (at least 16 samples), which keeps
        the low frequencies that sensitivities live in.

    Returns
    -------
    ndarray of shape (planes, channel, a, b)
    """
    rows, columns = box or calibration_box(acquisition)
    v = acquisition.shape[2]
    if square and columns == slice(0, v):
        columns = _centred(v, min(v, max(16, rows.stop - rows.start)))
    chosen = slice(None) if planes is None else planes
    return np.asarray(acquisition.kspace[chosen, :, rows, columns])


def _centred(count: int, size: int) -> slice:
    """``size`` positions around index count // 2, the extra one of an even size before it."""
    first = count // 2 - size // 2
    return slice(max(0, first), min(count, first + size))


def _largest_box(shared: NDArray[np.bool_], axes: int) -> tuple[int, ...]:
    centre = [n // 2 for n in shared.shape]
    if not shared[centre[0], centre[1]]:
        raise AcquisitionError(
            "The pattern leaves out zero frequency, so there is no calibration region.",
            f"mask, index {centre[0] if axes == 1 else tuple(centre)}",
            "Acquire a calibration region, or give sensitivities.",
        )
    sizes = [1] * axes
    grown = True
    while grown:
        grown = False
        for axis in range(axes):
            trial = list(sizes)
            trial[axis] += 1
            if trial[axis] > shared.shape[axis]:
                continue
            box = [_centred(shared.shape[a], s) for a, s in enumerate(trial)]
            part = shared[box[0], :] if axes == 1 else shared[box[0], box[1]]
            if part.all():
                sizes, grown = trial, True
    return tuple(sizes)
