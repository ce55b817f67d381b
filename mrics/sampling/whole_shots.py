"""Rounding the number of positions to whole shots, by a stated rule."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mrics.errors import PatternError
from mrics.sampling.grid import Field, Mask, calibration_block, radius
from mrics.sampling.pattern import Pattern

RULES = ("add", "drop", "idle")


@dataclass(frozen=True)
class Rounded:
    """What rounding to whole shots did.

    Attributes
    ----------
    mask : ndarray of bool
        The pattern in whole shots (frames first, where there are frames).
    rule : str
        "add", "drop" or "idle".
    before, after : int
        Positions drawn and played, frames together.
    added, dropped : ndarray of int, shape (n, mask.ndim)
        Positions.
    idle : int
        Echoes played without being kept, because the rule leaves them or every position the
        shutter lets through is already acquired.
    shot_length : int
        Positions of a whole shot.
    """

    mask: Mask
    rule: str
    before: int
    after: int
    added: NDArray[np.int64]
    dropped: NDArray[np.int64]
    idle: int
    shot_length: int

    @property
    def findings(self) -> tuple[str, ...]:
        """One sentence on what changed; none where nothing did."""
        parts = []
        if len(self.added):
            parts.append(f"the next most probable {len(self.added)} added")
        if len(self.dropped):
            parts.append(f"the least probable {len(self.dropped)} dropped")
        if self.idle:
            parts.append(f"{self.idle} echoes left idle")
        if not parts:
            return ()
        return (
            f"{self.before} positions in whole shots of {self.shot_length}: {self.after} played, "
            + ", ".join(parts)
            + ".",
        )


def fill_shots(pattern: Pattern, shot_length: int, rule: str) -> Rounded:
    """The pattern with a whole number of shots, every frame by itself.

    "add" takes the positions of highest inclusion probability not yet acquired (for regular
    patterns, and among equals, those nearest to the centre) and leaves echoes idle where the
    shutter holds no more; "drop" takes away those of lowest probability (the outermost), never the
    calibration region or positions that are certain.

    Raises
    ------
    PatternError
        For shots longer than the pattern, or too few positions that may be dropped.
    """
    mask = pattern.mask.copy()
    frames = mask if pattern.frames else mask[None]
    certain = calibration_block(pattern.grid, _sizes(pattern))
    certain[tuple(n // 2 for n in pattern.grid)] = True
    allowed = pattern.shutter if pattern.shutter is not None else np.ones(pattern.grid, bool)
    distance = radius(pattern.grid)
    idle = 0
    for number, frame in enumerate(frames):
        p = _probability(pattern, number)
        count = int(frame.sum())
        if shot_length > count:
            raise PatternError(
                f"The echo train of {shot_length} is longer than the pattern, which has {count} "
                "positions.",
                "echo_train_length",
                f"Give an echo train of at most {count}, or a smaller acceleration.",
            )
        over = count % shot_length
        short = shot_length - over if over else 0
        if rule == "add" and short:
            free = np.flatnonzero((allowed & ~frame).ravel())
            rank = np.lexsort((free, distance.ravel()[free], -p.ravel()[free]))
            np.put(frame, free[rank[:short]], True)
            short -= min(short, free.size)
        elif rule == "drop" and short:
            loose = np.flatnonzero((frame & ~certain & (p < 1)).ravel())
            if loose.size < over:
                raise PatternError(
                    f"{over} positions must be dropped for whole shots of {shot_length}, but only "
                    f"{loose.size} are neither calibration nor certain.",
                    "whole_shots",
                    'Use whole_shots = "add", or another echo train length.',
                )
            rank = np.lexsort((-loose, -distance.ravel()[loose], p.ravel()[loose]))
            np.put(frame, loose[rank[:over]], False)
            short = 0
        idle += short
    return Rounded(
        mask=mask,
        rule=rule,
        before=int(pattern.mask.sum()),
        after=int(mask.sum()),
        added=np.argwhere(mask & ~pattern.mask),
        dropped=np.argwhere(pattern.mask & ~mask),
        idle=idle,
        shot_length=shot_length,
    )


def _sizes(pattern: Pattern) -> tuple[int, ...]:
    """Calibration size per axis, also where a pattern leaves it at its default."""
    sizes = tuple(pattern.calibration)
    return sizes if len(sizes) == len(pattern.grid) else (0,) * len(pattern.grid)


def _probability(pattern: Pattern, frame: int) -> Field:
    if pattern.probability is None:
        return np.zeros(pattern.grid)
    return pattern.probability[frame] if pattern.frames else pattern.probability
