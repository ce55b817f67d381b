"""The sampling pattern: which phase-encode positions are acquired."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True)
class Pattern:
    """Acquired positions on the phase-encode grid, zero frequency at index N//2.

    Attributes
    ----------
    mask : ndarray of bool, shape (n_phase,) or (n_phase, n_partition)
        True where a position is acquired; frames add a leading axis (see ``frames``).
    frames : int
        0 for one pattern for all frames, else the length of the leading frame axis.
    probability : ndarray of float64 or None
        Inclusion probability of every position, shape of ``mask``; None for regular patterns.
    calibration : tuple of int
        Fully sampled central positions per axis, (0,) or (0, 0) for none.
    shutter : ndarray of bool or None
        Positions the sequence may acquire (elliptical shutter, partial Fourier); None for all.
    order : ndarray of int, shape (n_acquired, 2) or None
        (shot, echo) of each acquired position, in the order of ``numpy.argwhere(mask)``.
    settings : dict
        Everything needed to draw it again: law, draw, their parameters, seed, requested R, counts
        before and after rounding to shots.
    """

    mask: NDArray[np.bool_]
    frames: int = 0
    probability: NDArray[np.float64] | None = None
    calibration: tuple[int, ...] = (0,)
    shutter: NDArray[np.bool_] | None = None
    order: NDArray[np.int64] | None = None
    settings: dict[str, Any] = field(default_factory=dict)

    @property
    def grid(self) -> tuple[int, ...]:
        """Shape of the phase-encode grid: (n_phase,) or (n_phase, n_partition)."""
        return tuple(self.mask.shape[1:] if self.frames else self.mask.shape)

    @property
    def acquired(self) -> int:
        """Acquired positions (per frame on average, rounded, where frames differ)."""
        return round(int(self.mask.sum()) / max(1, self.frames))

    @property
    def acceleration(self) -> float:
        """Achieved R: positions of the full rectangular grid / acquired positions."""
        return float(self.mask.size / max(1, int(self.mask.sum())))

    @property
    def acceleration_in_shutter(self) -> float:
        """Positions the shutter lets through / acquired positions."""
        if self.shutter is None:
            return self.acceleration
        return float(self.shutter.sum() * max(1, self.frames) / max(1, int(self.mask.sum())))

    @property
    def hash(self) -> str:
        """SHA-256 of shape, mask and order: two equal tables have equal hashes."""
        digest = hashlib.sha256(repr(self.mask.shape).encode())
        digest.update(np.packbits(self.mask).tobytes())
        if self.order is not None:
            digest.update(np.ascontiguousarray(self.order, dtype="<i8").tobytes())
        return digest.hexdigest()
