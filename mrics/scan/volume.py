"""A scan in memory, and how its axes become a stack of 2-D planes."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import ScanError

LETTERS = "ijk"


@dataclass(frozen=True)
class Axes:
    """Which file axes (NIfTI/BIDS letters i, j, k) are readout, phase and partition.

    Attributes
    ----------
    readout, phase : str
        Letters of the readout and phase-encode axes.
    partition : str or None
        Letter of the partition axis of a 3-D sequence, or None for 2-D multi-slice.
    """

    readout: str = "i"
    phase: str = "j"
    partition: str | None = None

    def __post_init__(self) -> None:
        named = [a for a in (self.readout, self.phase, self.partition) if a is not None]
        for letter in named:
            if letter not in LETTERS or len(letter) != 1:
                raise ScanError(
                    f"Axis letter {letter!r} is not one of i, j, k.",
                    "readout_axis, phase_axis, partition_axis",
                    "Name the file's axes by the letters i, j and k.",
                )
        if len(set(named)) != len(named):
            raise ScanError(
                f"Axis letters {', '.join(named)} repeat one letter.",
                "readout_axis, phase_axis, partition_axis",
                "Give readout, phase and partition three different letters.",
            )

    @property
    def plane(self) -> str:
        """Letter of the axis that numbers the 2-D problems (readout in 3-D, slice in 2-D)."""
        if self.partition is not None:
            return self.readout
        return next(c for c in LETTERS if c not in (self.readout, self.phase))

    @property
    def u(self) -> str:
        """Letter of plane axis u: the phase axis."""
        return self.phase

    @property
    def v(self) -> str:
        """Letter of plane axis v: partition in 3-D, readout in 2-D multi-slice."""
        return self.partition if self.partition is not None else self.readout

    @property
    def order(self) -> tuple[int, int, int]:
        """File axis numbers of (plane, u, v)."""
        return (LETTERS.index(self.plane), LETTERS.index(self.u), LETTERS.index(self.v))

    def to_planes(self, volume: NDArray[Any]) -> NDArray[Any]:
        """(i, j, k) or (i, j, k, frame) as a stack (plane, u, v); frames fold into plane.

        Frame f of plane p is stack index ``f * n_planes + p``.
        """
        if volume.ndim == 4:
            stack = np.moveaxis(volume, 3, 0).transpose(0, *(a + 1 for a in self.order))
            return stack.reshape(-1, *stack.shape[2:])
        return volume.transpose(self.order)

    def from_planes(self, stack: NDArray[Any], shape: tuple[int, ...]) -> NDArray[Any]:
        """Inverse of :meth:`to_planes` for a volume of ``shape``."""
        spatial = np.empty(3, dtype=int)
        for position, axis in enumerate(self.order):
            spatial[axis] = position
        if len(shape) == 4:
            n_planes = shape[self.order[0]]
            folded = stack.reshape(shape[3], n_planes, *stack.shape[1:])
            return np.moveaxis(folded.transpose(0, *(int(a) + 1 for a in spatial)), 0, 3)
        return stack.transpose(*(int(a) for a in spatial))


@dataclass(frozen=True)
class Scan:
    """One volume, as the file has it, with what is known of where it came from.

    Attributes
    ----------
    data : ndarray of shape (i, j, k) or (i, j, k, frame), float32, complex64 or complex128
        Values in file order; with channels a last axis is added: (i, j, k, frame, channel).
    affine : ndarray of shape (4, 4)
        Voxel index to world position in mm.
    voxel_mm : tuple of 3 float
        Voxel size along i, j, k.
    name : str
        File name without folder and ending, used as the scan's label.
    sha256 : str
        Hash of the file's bytes (of all files of a pair).
    complex_source : str
        "magnitude", "magnitude+phase", "real+imaginary", "complex" or "invented phase".
    header : nibabel header or None
        The source's header, from which written images take shape-independent fields.
    remedies : tuple of str
        What was done to the data since it was read, one sentence each.
    """

    data: NDArray[Any]
    affine: NDArray[np.float64]
    voxel_mm: tuple[float, float, float]
    name: str = "scan"
    sha256: str = ""
    complex_source: str = "complex"
    header: Any = field(default=None, repr=False, compare=False)
    remedies: tuple[str, ...] = ()

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of :attr:`data`."""
        return tuple(self.data.shape)

    @property
    def frames(self) -> int:
        """Number of frames (1 for a 3-D scan)."""
        return int(self.data.shape[3]) if self.data.ndim > 3 else 1

    @property
    def channels(self) -> int:
        """Number of receive channels (1 when the file holds a combined image)."""
        return int(self.data.shape[4]) if self.data.ndim > 4 else 1

    @property
    def magnitude_only(self) -> bool:
        """True where the file says nothing of phase: its k-space is Hermitian."""
        return self.complex_source == "magnitude"


def apart_mm(
    shape: tuple[int, ...], affine: NDArray[np.float64], other: NDArray[np.float64]
) -> float:
    """Largest distance along one axis that two affines put between the same corner voxel."""
    corners = np.array(
        [[i, j, k, 1] for i in (0, 1) for j in (0, 1) for k in (0, 1)], dtype=np.float64
    )
    corners[:, :3] *= np.array(shape[:3]) - 1
    return float(np.abs((corners @ (affine - other).T)[:, :3]).max())
