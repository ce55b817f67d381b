"""Regular families from their entries: lattices, full sampling, spokes, spirals, mask files."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import PatternError
from mrics.sampling.grid import Mask
from mrics.sampling.radial import golden_angle, played, spiral_arm, spoke
from mrics.sampling.regular import lattice, lattice_steps
from mrics.sampling.vocabulary import Entry

_TURNS = 2.0


@dataclass(frozen=True)
class Played:
    """A regular pattern: mask (frames first), order where it has one, and facts for the record.

    ``calibration`` is given where the pattern itself says what it is (mask files).
    """

    mask: Mask
    order: NDArray[np.int64] | None = None
    calibration: tuple[int, ...] | None = None
    facts: dict[str, Any] = field(default_factory=dict)


def play_regular(
    entry: Entry,
    grid: tuple[int, ...],
    acceleration: float | None,
    frames: int,
    *,
    certain: Mask,
    shutter: Mask,
) -> Played:
    """A regular pattern on a grid.

    Parameters
    ----------
    entry : Entry
        A checked entry whose pattern is not "random".
    grid : tuple of int
        Grid shape.
    acceleration : float or None
        Lattice step (product over axes), or R of spokes and spirals.
    frames : int
        0, or number of frames; with ``frame_draws = "complementary"`` a lattice moves on from
        frame to frame and spokes go on turning.
    certain, shutter : ndarray of bool
        Calibration block, and the positions that may be acquired (calibration included).

    Raises
    ------
    PatternError
        For a grid or acceleration the family cannot have.
    """
    if entry.pattern == "file":
        return _from_file(entry, grid, acceleration, frames)
    if entry.pattern == "full":
        if acceleration != 1:
            raise PatternError(
                f"Full sampling has acceleration 1, not {acceleration:g}.",
                "acceleration of the pattern 'full'",
                "Leave the acceleration out; partial Fourier and the shutter shorten it.",
            )
        return _repeated(shutter, frames)
    moving = frames > 0 and entry.frame_draws != "same"
    if entry.pattern in ("spokes", "spiral"):
        assert acceleration is not None
        return _radial(entry, grid, acceleration, frames if moving else 0, certain, shutter, frames)
    steps = _steps(entry, grid, acceleration)
    shift = entry.options.get("shift", 1) if entry.pattern == "shifted lattice" else 0
    facts = {"steps": list(steps), "acceleration": float(np.prod(steps)), "shift": shift}
    if not moving:
        mask = lattice(grid, steps, shift) & shutter | certain
        repeated = _repeated(mask, frames)
        return Played(repeated.mask, facts=facts | repeated.facts)
    masks = np.stack([lattice(grid, steps, shift, f) & shutter | certain for f in range(frames)])
    return Played(masks, facts=facts | _union(masks))


def _steps(entry: Entry, grid: tuple[int, ...], acceleration: float | None) -> tuple[int, ...]:
    if entry.pattern == "equispaced":
        return lattice_steps(grid, acceleration, entry.options.get("steps"))
    if len(grid) != 2:
        raise PatternError(
            "A shifted lattice needs a 2-D grid.",
            f"pattern = 'shifted lattice' on a grid of {grid[0]} lines",
            "Use the pattern 'equispaced' for 1-D patterns.",
        )
    return lattice_steps(grid, acceleration, entry.options.get("steps", [1, acceleration]))


def _repeated(mask: Mask, frames: int) -> Played:
    if not frames:
        return Played(mask)
    masks = np.repeat(mask[None], frames, axis=0)
    return Played(masks, facts=_union(masks))


def _union(masks: Mask) -> dict[str, Any]:
    union = masks.any(axis=0)
    return {"union_count": int(union.sum()), "union_coverage": float(union.mean())}


def _radial(
    entry: Entry,
    grid: tuple[int, ...],
    acceleration: float,
    moving_frames: int,
    certain: Mask,
    shutter: Mask,
    frames: int,
) -> Played:
    if len(grid) != 2:
        raise PatternError(
            f"The pattern {entry.pattern!r} needs a 2-D grid.",
            f"pattern = {entry.pattern!r} on a grid of {grid[0]} lines",
            "Use a random or equispaced pattern for 1-D patterns.",
        )
    path: Callable[[float], NDArray[np.int64]] = (
        partial(spoke, grid)
        if entry.pattern == "spokes"
        else partial(spiral_arm, grid, turns=entry.options.get("turns", _TURNS))
    )
    turn = golden_angle(entry.options.get("golden_order", 1))
    turn *= 1 if entry.pattern == "spokes" else 2
    target = round(int(np.prod(grid)) / acceleration)
    masks, orders, numbers, first = [], [], [], 0
    for _ in range(max(1, moving_frames)):
        mask, order, number = played(
            grid,
            target,
            path,
            angle_deg=turn,
            first=first,
            allowed=shutter,
            calibration=certain,
        )
        masks.append(mask)
        orders.append(order)
        numbers.append(number)
        first += number
    facts: dict[str, Any] = {"requested_count": target, "shots": numbers}
    if not frames:
        return Played(masks[0], orders[0], facts=facts)
    if not moving_frames:
        masks, orders = masks * frames, orders * frames
    stacked = np.stack(masks)
    return Played(stacked, np.concatenate(orders), facts=facts | _union(stacked))


def _from_file(
    entry: Entry, grid: tuple[int, ...], acceleration: float | None, frames: int
) -> Played:
    from mrics.sampling.table import read_pattern

    if "file" not in entry.options:
        raise PatternError(
            "The pattern 'file' needs the key 'file'.", "file", "Name a mask or a sampling table."
        )
    pattern = read_pattern(entry.options["file"], grid)
    if acceleration is not None and abs(pattern.acceleration / acceleration - 1) > 0.01:
        raise PatternError(
            f"The pattern in the file has acceleration {pattern.acceleration:.4g}, "
            f"not {acceleration:g}.",
            str(entry.options["file"]),
            "Leave the acceleration out, or give the file's own.",
        )
    if pattern.frames not in (0, frames):
        raise PatternError(
            f"The pattern in the file has {pattern.frames} frames, the scan {frames or 1}.",
            str(entry.options["file"]),
            "Give a pattern with one frame, or with as many as the scan.",
        )
    facts = {"file_hash": pattern.hash}
    if frames and not pattern.frames:
        repeated = _repeated(pattern.mask, frames)
        return Played(repeated.mask, None, pattern.calibration, facts | repeated.facts)
    return Played(pattern.mask, pattern.order, pattern.calibration, facts)
