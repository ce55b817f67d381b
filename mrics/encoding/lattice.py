"""Which regular lattice a pattern holds."""

from __future__ import annotations

from dataclasses import dataclass
from functools import reduce
from math import gcd

import numpy as np
from numpy.typing import NDArray

from mrics.encoding.acquisition import Acquisition
from mrics.encoding.calibration import calibration_box
from mrics.errors import AcquisitionError

Mask = NDArray[np.bool_]


@dataclass(frozen=True)
class Lattice:
    """Positions ``(origin + steps * (m, n) + (0, shift * m))`` for whole m, n, on a centred grid.

    Attributes
    ----------
    steps : tuple of int
        Distance of acquired lines along u, and of acquired positions along v on a line (1 where
        the readout is full).
    shift : int
        By how much v positions move from one acquired line to the next, below ``steps[1]``.
    origin : tuple of int
        One acquired position (index on the centred grid).
    """

    steps: tuple[int, int]
    shift: int
    origin: tuple[int, int]

    @property
    def acceleration(self) -> int:
        """Lattice acceleration R: how many voxels fold on one another."""
        return self.steps[0] * self.steps[1]

    def mask(self, u: int, v: int) -> Mask:
        """The lattice on a grid of (u, v) positions."""
        line, rest = np.divmod(np.arange(u) - self.origin[0], self.steps[0])
        start = self.origin[1] + line * self.shift
        along = (np.arange(v)[None] - start[:, None]) % self.steps[1] == 0
        return np.asarray((rest == 0)[:, None] & along)

    def closes(self, u: int, v: int) -> bool:
        """Whether the lattice is periodic on the grid, so that voxels fold on voxels exactly."""
        lines_fit = u % self.steps[0] == 0 and v % self.steps[1] == 0
        return lines_fit and (u // self.steps[0] * self.shift) % self.steps[1] == 0


def find_lattice(acquisition: Acquisition, *, shutter: bool = False) -> Lattice:
    """The lattice of a regular pattern, calibration region left aside.

    Parameters
    ----------
    acquisition : Acquisition
        Data whose planes share one pattern.
    shutter : bool
        Whether lattice positions outside the pattern's shutter may be missing.

    Raises
    ------
    AcquisitionError
        Where frames have different patterns, or the pattern is not regular outside the
        calibration region.
    """
    if acquisition.mask.shape[0] > 1 and (acquisition.mask != acquisition.mask[:1]).any():
        raise AcquisitionError(
            f"The {acquisition.mask.shape[0]} frames have different patterns.",
            "pattern, frames",
            "Recover frames that share a pattern, or use least-squares.",
        )
    mask = acquisition.mask[0]
    box = _calibration(acquisition)
    outside = mask.copy()
    outside[box] = False
    allowed = np.ones(mask.shape, bool)
    if shutter and acquisition.pattern.shutter is not None:
        allowed &= acquisition.pattern.shutter.reshape(allowed.shape)
    found = _from_positions(mask if not outside.any() else outside, mask)
    expected = found.mask(*mask.shape) & allowed
    wrong = mask != expected
    wrong[box] = (expected & ~mask)[box]
    if wrong.any():
        first = tuple(int(i) for i in np.argwhere(wrong)[0])
        where = first[0] if mask.shape[1] == 1 else first
        raise AcquisitionError(
            f"The pattern is not regular: {int(wrong.sum())} positions outside the calibration "
            f"region are off the lattice of steps {found.steps} and shift {found.shift}, the first "
            f"at index {where}.",
            "pattern",
            "Draw a regular pattern without shutter, or use least-squares.",
        )
    return found


def _calibration(acquisition: Acquisition) -> tuple[slice, slice]:
    try:
        return calibration_box(acquisition)
    except AcquisitionError:
        return slice(0, 0), slice(0, 0)


def _from_positions(positions: Mask, mask: Mask) -> Lattice:
    lines = np.flatnonzero(positions.any(axis=1))
    step_u = _step(np.diff(lines))
    first = int(lines[0])
    if mask.shape[1] == 1:
        return Lattice((step_u, 1), 0, (first % step_u, 0))
    along = [np.flatnonzero(positions[line]) for line in lines]
    step_v = _step(np.concatenate([np.diff(p) for p in along]))
    shift = 0
    for line, nxt, here, there in zip(lines, lines[1:], along, along[1:], strict=False):
        if nxt - line == step_u:
            shift = int(there[0] - here[0]) % step_v
            break
    return Lattice((step_u, step_v), shift, (first, int(along[0][0] % step_v)))


def _step(gaps: NDArray[np.intp]) -> int:
    return max(1, reduce(gcd, (int(g) for g in gaps), 0))
