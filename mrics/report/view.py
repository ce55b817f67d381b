"""How a plane of a scan lies on the page: which axis runs where, in which direction."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.scan.volume import LETTERS

# (letter at the low end, letter at the high end) of the world axes of NIfTI: +x right, +y
# anterior, +z superior.
_ENDS = (("L", "R"), ("P", "A"), ("I", "S"))


@dataclass(frozen=True)
class PlaneView:
    """Placement of planes on the page.

    Right, anterior and superior lie on the left or on top, as films are hung by custom, so the
    reader looks from the feet, from the front or from the patient's left.

    Attributes
    ----------
    plane_axis, row_axis, column_axis : int
        File axes that number the planes, run down the page and run across it.
    flip_rows, flip_columns : bool
        Whether the axis runs against its index.
    ends : tuple of str
        What lies left, right, top and bottom: R, L, A, P, S, I, or "" where the affine tells
        nothing.
    rows, columns : int
        Size of a plane on the page.
    row_mm, column_mm : float
        Voxel size down and across.
    affine : ndarray of shape (4, 4)
        Voxel index to mm.
    """

    plane_axis: int
    row_axis: int
    column_axis: int
    flip_rows: bool
    flip_columns: bool
    ends: tuple[str, str, str, str]
    rows: int
    columns: int
    row_mm: float
    column_mm: float
    affine: NDArray[np.float64]

    def turn(self, volume: NDArray[Any]) -> NDArray[Any]:
        """A volume in file axes as (planes, rows, columns)."""
        out = volume.transpose(self.plane_axis, self.row_axis, self.column_axis)
        if self.flip_rows:
            out = out[:, ::-1]
        return out[:, :, ::-1] if self.flip_columns else out

    def millimetres(self) -> NDArray[np.float64]:
        """Matrix of shape (3, 4) that takes (plane, row, column, 1) of the page to mm."""
        index = np.zeros((4, 4))
        index[3, 3] = 1
        index[self.plane_axis, 0] = 1
        for axis, place, flip, count in (
            (self.row_axis, 1, self.flip_rows, self.rows),
            (self.column_axis, 2, self.flip_columns, self.columns),
        ):
            index[axis, place] = -1 if flip else 1
            index[axis, 3] = count - 1 if flip else 0
        return (self.affine @ index)[:3]

    @property
    def letters(self) -> tuple[str, str, str]:
        """Letters of the plane, row and column axes."""
        return (LETTERS[self.plane_axis], LETTERS[self.row_axis], LETTERS[self.column_axis])


def plane_view(
    affine: NDArray[np.float64], plane_letter: str, shape: tuple[int, ...], voxel_mm: Any
) -> PlaneView:
    """Placement of the planes of a scan.

    Parameters
    ----------
    affine : ndarray of shape (4, 4)
        Voxel index to mm; the nearest world axis of each file axis decides its place.
    plane_letter : str
        Letter of the axis that numbers the planes.
    shape : tuple of int
        Shape of the volume in file axes.
    voxel_mm : sequence of 3 float
        Voxel sizes.
    """
    from nibabel.orientations import io_orientation

    plane = LETTERS.index(plane_letter)
    ornt = io_orientation(affine)
    first, second = (a for a in range(3) if a != plane)
    if np.isnan(ornt).any():
        row, column, flips, ends = second, first, (True, False), ("", "", "", "")
    else:
        world = ornt[:, 0].astype(int)
        row, column = (first, second) if world[first] > world[second] else (second, first)
        flips = (bool(ornt[row, 1] > 0), bool(ornt[column, 1] > 0))
        low_c, high_c = _ENDS[world[column]]
        low_r, high_r = _ENDS[world[row]]
        ends = (high_c, low_c, high_r, low_r)
    return PlaneView(
        plane,
        row,
        column,
        flips[0],
        flips[1],
        ends,
        shape[row],
        shape[column],
        float(voxel_mm[row]),
        float(voxel_mm[column]),
        np.asarray(affine, dtype=float),
    )
