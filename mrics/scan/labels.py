"""Reading a label map: regions drawn on the grid of a scan."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from mrics.errors import ScanError
from mrics.scan.header import read_header
from mrics.scan.values import read_values
from mrics.scan.volume import Scan, apart_mm


def read_labels(path: str | Path, like: Scan) -> NDArray[np.int32]:
    """Read a NIfTI label map that lies on the grid of a scan.

    Parameters
    ----------
    path : str or Path
        Whole numbers, 0 for no region.
    like : Scan
        The scan it was drawn on.

    Returns
    -------
    ndarray of int, shape (i, j, k)

    Raises
    ------
    ScanError
        Where the file cannot be read, lies on another grid, holds values that are not whole
        numbers from 0, or holds no region.
    """
    header = read_header(path)
    shape = like.shape[:3]
    own = header.shape[:3]
    if own != shape or any(n != 1 for n in header.shape[3:]):
        raise ScanError(
            f"The label map is on another grid: its shape is {header.shape}, the scan's {shape}.",
            f"{path}, scan {like.name}",
            "Draw the labels on the scan itself, or resample them to its grid.",
        )
    apart = apart_mm(shape, like.affine, header.affine)
    if apart > 0.01 * min(like.voxel_mm):
        raise ScanError(
            f"The label map is on another grid: its affine puts voxels up to {apart:.3g} mm away.",
            f"{path}, scan {like.name}",
            "Draw the labels on the scan itself, or resample them to its grid.",
        )
    values = read_values(header, zero_allowed=True).reshape(shape)
    wrong = ~((values.real >= 0) & (values == np.round(values.real)))
    if wrong.any():
        first = tuple(int(n) for n in np.argwhere(wrong)[0])
        raise ScanError(
            f"The label map holds {int(wrong.sum())} values that are not whole numbers from 0, "
            f"the first {values[first]:g}.",
            f"{path}, voxel {first}",
            "Give labels without interpolation; 0 is no region.",
        )
    labels = values.real.astype(np.int32)
    if not labels.any():
        raise ScanError("The label map holds no region.", str(path), "Give labels above 0.")
    return labels
