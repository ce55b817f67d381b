"""An acquisition as blocks of planes, read as they are needed."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding.acquisition import Acquisition
from mrics.encoding.noise import relative_covariance, whitening
from mrics.encoding.operator import Encoding
from mrics.errors import AcquisitionError
from mrics.numerics import uncentre

Array = NDArray[Any]


def blocks(
    acquisition: Acquisition, max_bytes: int = 64 * 2**20
) -> Iterator[tuple[slice, Encoding, Array]]:
    """Plane blocks of an acquisition, each with its operator.

    Memory-mapped k-space and sensitivities are read one block at a time, so memory does not grow
    with the number of planes.

    Parameters
    ----------
    acquisition : Acquisition
        Where it has a covariance, data and sensitivities are whitened by the covariance scaled to
        a mean diagonal of 1, so that every channel's noise is white with standard deviation
        ``acquisition.sigma``.
    max_bytes : int
        Largest size of one block's k-space; a block has at least one plane.

    Yields
    ------
    planes : slice
        Which planes of the stack.
    encoding : Encoding
        Operator of the block.
    data : ndarray of shape ``encoding.out_shape``
        Un-centred k-space, a copy that the caller may change.
    """
    n_planes, u, v = acquisition.shape
    kspace = acquisition.kspace
    maps = acquisition.sensitivities
    if maps is None and acquisition.channels > 1:
        raise AcquisitionError(
            f"The acquisition has {acquisition.channels} channels and no sensitivities.",
            "sensitivities",
            "Estimate them from the calibration region first.",
        )
    matrix = None
    if acquisition.covariance is not None and acquisition.channels > 1:
        matrix = whitening(relative_covariance(acquisition.covariance, acquisition.channels))
    masks = uncentred_masks(acquisition)
    size = acquisition.channels * u * v * kspace.dtype.itemsize
    step = max(1, max_bytes // size)
    shared = None
    if maps is not None and maps.shape[0] == 1:
        shared = _mix(matrix, np.asarray(maps, dtype=kspace.dtype))
    for start in range(0, n_planes, step):
        planes = slice(start, min(start + step, n_planes))
        index = acquisition.pattern_index[planes]
        mask = masks[index[:1]] if (index == index[0]).all() else masks[index]
        data = uncentre(np.asarray(kspace[planes]))
        if matrix is not None:
            data = _mix(matrix, data)
        block_maps = shared
        if maps is not None and shared is None:
            block_maps = _mix(matrix, np.asarray(maps[planes], dtype=kspace.dtype))
        shape = (planes.stop - planes.start, u, v)
        yield planes, Encoding(mask[:, None], shape, kspace.dtype, block_maps), data


def uncentred_masks(acquisition: Acquisition) -> NDArray[np.bool_]:
    """The acquisition's masks with zero frequency at index 0, shape (pattern, u, v or 1)."""
    _, u, v = acquisition.mask.shape
    return np.roll(acquisition.mask, (-(u // 2), -(v // 2)), axis=(-2, -1))


def _mix(matrix: Array | None, channels: Array) -> Array:
    """A channel-mixing matrix applied to (planes, channels, u, v), type kept."""
    if matrix is None:
        return channels
    planes, count, u, v = channels.shape
    flat = channels.reshape(planes, count, u * v)
    return np.matmul(matrix.astype(channels.dtype), flat).reshape(planes, len(matrix), u, v)
