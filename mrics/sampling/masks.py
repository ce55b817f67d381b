"""Patterns from masks made elsewhere."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import PatternError
from mrics.sampling.pattern import Pattern


def pattern_of_mask(
    mask: NDArray[np.bool_],
    frames: int = 0,
    *,
    calibration: tuple[int, ...] | None = None,
    order: NDArray[np.int64] | None = None,
    settings: dict[str, Any] | None = None,
) -> Pattern:
    """A pattern from a mask (frames first), for masks that no law of ours drew.

    Raises
    ------
    PatternError
        When no position is acquired, in any or in one frame.
    """
    per_frame = mask.reshape(max(1, frames), -1).any(axis=1)
    kept = dict(settings or {"pattern": "file"})
    if not per_frame.all():
        raise PatternError(
            "The mask acquires no position" + (" in one of its frames." if frames else "."),
            str(kept.get("file", "mask")) + (f", frame {int(np.argmin(per_frame))}" * bool(frames)),
            "Give a mask with at least one acquired position.",
        )
    if mask.all():
        kept["note"] = "fully sampled mask: R = 1"
    kept.setdefault("count", int(mask.sum()))
    if calibration is None:
        calibration = central_block(np.asarray(mask.all(axis=0)) if frames else mask)
    return Pattern(mask=mask, frames=frames, calibration=calibration, order=order, settings=kept)


def central_block(mask: NDArray[np.bool_]) -> tuple[int, ...]:
    """Size per axis of a fully sampled block around zero frequency, as large as it gets.

    The block grows by one position on every axis in turn while it stays fully sampled; a block of
    fewer than 4 positions on an axis is counted as none.
    """
    sizes = [0] * mask.ndim
    if mask[tuple(n // 2 for n in mask.shape)]:
        sizes = [1] * mask.ndim
        growing = True
        while growing:
            growing = False
            for axis, n in enumerate(mask.shape):
                larger = [s + (a == axis) for a, s in enumerate(sizes)]
                starts = [m // 2 - s // 2 for m, s in zip(mask.shape, larger, strict=True)]
                block = tuple(slice(b, b + s) for b, s in zip(starts, larger, strict=True))
                if sizes[axis] < n and mask[block].all():
                    sizes, growing = larger, True
    return tuple(sizes) if min(sizes) >= 4 else (0,) * mask.ndim
