"""Some planes of an acquisition, as an acquisition of its own."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from mrics.encoding.acquisition import Acquisition
from mrics.encoding.channels import planes_of
from mrics.errors import AcquisitionError


def frames_of(acquisition: Acquisition) -> int:
    """Frames folded into the planes (frame by frame), 1 where there is one."""
    shape = acquisition.volume_shape
    return int(shape[3]) if len(shape) > 3 else max(1, acquisition.pattern.frames)


def some_planes(acquisition: Acquisition, planes: Sequence[int]) -> Acquisition:
    """The acquisition of some planes of the stack, read into memory.

    Parameters
    ----------
    acquisition : Acquisition
        The whole stack.
    planes : sequence of int
        Which planes, in the order wanted; one may stand there several times.

    Returns
    -------
    Acquisition
        A bare stack: it does not know where its planes lie in the file. Where the planes are the
        same places of every frame, frame by frame, it keeps its frames.

    Raises
    ------
    AcquisitionError
        For planes that are not in the stack.
    """
    chosen = [int(plane) for plane in planes]
    count = acquisition.shape[0]
    outside = [plane for plane in chosen if not 0 <= plane < count]
    if outside or not chosen:
        raise AcquisitionError(
            f"Planes {outside or chosen} are not in a stack of {count}.",
            "planes",
            f"Choose from 0 to {count - 1}.",
        )
    maps, mixing = acquisition.sensitivities, acquisition.compression
    if maps is not None and len(maps) > 1:
        maps = np.concatenate([planes_of(maps, slice(p, p + 1)) for p in chosen])
    if mixing is not None and len(mixing) > 1:
        mixing = mixing[chosen]
    return replace(
        acquisition,
        kspace=np.stack([np.asarray(acquisition.kspace[plane]) for plane in chosen]),
        pattern_index=acquisition.pattern_index[chosen],
        sensitivities=maps,
        compression=mixing,
        axes=None,
        volume_shape=_volume_shape(acquisition, chosen),
    )


def _volume_shape(acquisition: Acquisition, chosen: list[int]) -> tuple[int, ...]:
    frames, grid = frames_of(acquisition), acquisition.shape[1:]
    places, apart = len(chosen) // frames, acquisition.shape[0] // frames
    whole = [frame * apart + place for frame in range(frames) for place in chosen[:places]]
    return (places, *grid, frames) if frames > 1 and chosen == whole else (len(chosen), *grid)
