"""Whether arms, channels and named edges fit each other, known before any scan is read."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from mrics.encoding.acquisition import Acquisition
from mrics.encoding.lattice import find_lattice
from mrics.errors import AcquisitionError, RecoveryError, StudyError
from mrics.protocol import Protocol
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


def check_channels(protocol: Protocol) -> None:
    """Channels are the scan's own or simulated, and there must be some to compress."""
    own, coils = protocol.grid.channel_axis is not None, protocol.coils
    if own and coils is not None:
        raise StudyError(
            f"[coils] simulates an array, but channel_axis = {protocol.grid.channel_axis} names "
            "the scans' own channels.",
            f"{protocol.path}: [coils], grid.channel_axis",
            "Remove one of the two.",
        )
    virtual = protocol.study.virtual_channels
    if virtual is None or own:
        return
    most = coils.number if coils is not None else 1
    if virtual > most:
        raise StudyError(
            f"{virtual} virtual channels cannot be made of {most}.",
            f"{protocol.path}: study.virtual_channels",
            f"Give a number from 1 to {most}."
            if coils is not None
            else "Name the scans' channel_axis, add [coils], or remove virtual_channels.",
        )


def check_edges(
    protocol: Protocol, scan_ids: Sequence[str], shapes: Sequence[tuple[int, ...]]
) -> None:
    """Whether every edge of ``[quality]`` lies in a scan of the study."""
    measures = protocol.measures()
    if measures is None or isinstance(measures.edges, bool):
        return
    for number, edge in enumerate(measures.edges):
        where = f"{protocol.path}: quality.edges[{number}]"
        if edge.scan and edge.scan not in scan_ids:
            raise StudyError(
                f"There is no scan {edge.scan!r}.", where, f"Scans: {', '.join(scan_ids)}."
            )
        for scan_id, shape in zip(scan_ids, shapes, strict=True):
            at = (edge.i, edge.j, edge.k)
            inside = all(0 <= x <= n - 1 for x, n in zip(at, shape[:3], strict=True))
            if edge.scan in ("", scan_id) and not inside:
                raise StudyError(
                    f"The edge at voxel {at} lies outside scan {scan_id} of shape {shape[:3]}.",
                    where,
                    "Give voxels of the file counted from 0, or name the scan it lies in.",
                )
