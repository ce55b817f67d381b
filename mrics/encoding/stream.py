"""An acquisition as blocks of planes, read as they are needed."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding.acquisition import Acquisition
from mrics.encoding.calibration import calibration_box
from mrics.encoding.channels import channel_mixing, mix, planes_of
from mrics.encoding.operator import Encoding
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
        ``acquisition.sigma``; where it has a compression, channels are the virtual ones. Several
        channels without sensitivities get them from each block's calibration region
        (``with_sensitivities`` estimates once and keeps them).
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
    kspace, maps = acquisition.kspace, acquisition.sensitivities
    matrix = channel_mixing(acquisition)
    masks = uncentred_masks(acquisition)
    virtual = acquisition.channels if matrix is None else matrix.shape[1]
    step = max(1, max_bytes // (acquisition.channels * u * v * kspace.dtype.itemsize))
    if maps is None and virtual > 1:
        calibration_box(acquisition)
    shared = None
    if maps is not None and maps.shape[0] == 1 and (matrix is None or matrix.shape[0] == 1):
        shared = mix(matrix, np.asarray(maps, dtype=kspace.dtype), slice(0, 1))
    for start in range(0, n_planes, step):
        planes = slice(start, min(start + step, n_planes))
        index = acquisition.pattern_index[planes]
        mask = masks[index[:1]] if (index == index[0]).all() else masks[index]
        data = uncentre(mix(matrix, np.asarray(kspace[planes]), planes))
        block_maps = shared
        if maps is None and acquisition.channels > 1:
            block_maps = _estimated(acquisition, planes, virtual)
        elif maps is not None and shared is None:
            chosen = planes_of(maps, planes)
            if len(chosen) == 1:
                chosen = np.repeat(chosen, planes.stop - planes.start, axis=0)
            block_maps = mix(matrix, np.asarray(chosen, dtype=kspace.dtype), planes)
        shape = (planes.stop - planes.start, u, v)
        yield planes, Encoding(mask[:, None], shape, kspace.dtype, block_maps), data


def _estimated(acquisition: Acquisition, planes: slice, virtual: int) -> Array:
    """Maps of the planes from their calibration region."""
    if virtual == 1:
        shape = (1, 1, *acquisition.shape[1:])
        return np.ones(shape, acquisition.kspace.dtype)
    from mrics.encoding.sensitivities import estimate_sensitivities

    return estimate_sensitivities(acquisition, planes)[0][:, 0]


def uncentred_masks(acquisition: Acquisition) -> NDArray[np.bool_]:
    """The acquisition's masks with zero frequency at index 0, shape (pattern, u, v or 1)."""
    _, u, v = acquisition.mask.shape
    return np.roll(acquisition.mask, (-(u // 2), -(v // 2)), axis=(-2, -1))
