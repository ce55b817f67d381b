"""Whether a recovery can work on a pattern at all, known before any scan is read."""

from __future__ import annotations

import numpy as np

from mrics.encoding.acquisition import Acquisition
from mrics.encoding.lattice import find_lattice
from mrics.errors import AcquisitionError, RecoveryError
from mrics.sampling import Pattern

#: recoveries that take regular patterns only; whether they allow a shutter
_REGULAR = {"unfold": False, "kernel": True}


def check_suitable(method: str, pattern: Pattern) -> None:
    """Refuse a pattern that the recovery will not take.

    Parameters
    ----------
    method : str
        Name of a recovery.
    pattern : Pattern
        First draw of an arm.

    Raises
    ------
    RecoveryError
        Where ``unfold`` or ``kernel`` are given a pattern that is not regular.
    """
    if method not in _REGULAR:
        return
    masks = pattern.mask if pattern.frames else pattern.mask[None]
    masks = masks if len(pattern.grid) == 2 else masks[:, :, None]
    frames = len(masks)
    nothing = np.broadcast_to(np.zeros((), np.complex64), (frames, 1, *masks.shape[1:]))
    bare = Acquisition(nothing, masks, np.arange(frames), pattern, calibration=pattern.calibration)
    try:
        find_lattice(bare, shutter=_REGULAR[method])
    except AcquisitionError as error:
        fix = "Pair it with a regular pattern in a protocol of its own, or use least-squares."
        raise RecoveryError(f"{method}: {error.what}", error.where, fix) from error
