"""A scan or an array as planes, whatever axes it has, without a copy."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import AcquisitionError
from mrics.sampling.pattern import Pattern
from mrics.scan.volume import Axes, Scan

Array = NDArray[Any]
_BLOCK_BYTES = 32 * 2**20


class Source:
    """A scan or array as planes, read block by block so that nothing is held twice.

    Parameters
    ----------
    given : Scan or ndarray of shape (plane, u, v)
        With ``channel_axis`` an array has one axis more.
    pattern : Pattern
        A 2-D one asks for a partition axis; its frames split an array's planes.
    axes : Axes or None
        How a scan's axes are encoded; default readout i, phase j, and k as partition or slice.
    channel_axis : int, optional
        Which axis of an array holds channels.
    """

    def __init__(
        self,
        given: Scan | Array,
        pattern: Pattern,
        axes: Axes | None = None,
        channel_axis: int | None = None,
    ) -> None:
        self.two_d = len(pattern.grid) == 2
        self.axes = axes
        if isinstance(given, Scan):
            self._from_scan(given)
        else:
            _check_array(given)
            self._from_array(given, pattern, channel_axis)
        kind = self.stack.dtype
        double = kind in (np.dtype(np.float64), np.dtype(np.complex128))
        self.dtype = np.dtype(np.complex128 if double else np.complex64)

    def _from_scan(self, scan: Scan) -> None:
        axes = self.axes or Axes("i", "j", "k" if self.two_d else None)
        if self.two_d and axes.partition is None:
            raise AcquisitionError(
                f"A 2-D pattern needs a partition axis; readout is {axes.readout}, phase is "
                f"{axes.phase} and there is no partition axis.",
                "partition_axis",
                "Name the partition axis, or draw a 1-D pattern for 2-D multi-slice.",
            )
        self.axes = axes
        self.frames, self.channels = scan.frames, scan.channels
        self.volume_shape = scan.shape[:4]
        # A view (frame, plane, channel, u, v), whatever axes the file has.
        whole = scan.data.reshape(*scan.shape[:3], self.frames, self.channels)
        plane, u, v = axes.order
        self.stack = whole.transpose(3, plane, 4, u, v)
        kind = "partition" if axes.partition is not None else "readout"
        self.names = (f"phase axis {axes.u}", f"{kind} axis {axes.v}")

    def _from_array(self, array: Array, pattern: Pattern, channel_axis: int | None) -> None:
        stack = array
        if channel_axis is not None:
            self._check_channels(array, channel_axis)
            stack = np.moveaxis(array, channel_axis, 0)
        if stack.ndim != 3 + (channel_axis is not None):
            raise AcquisitionError(
                f"An array must be a stack (plane, u, v); got {array.ndim} axes, shape "
                f"{array.shape}{'' if channel_axis is None else ', one of them channels'}.",
                "axes (plane, u, v)",
                "Add a plane axis to a single image, name the channel axis, or pass a scan.",
            )
        if channel_axis is None:
            stack = stack[None]
        stack = np.moveaxis(stack, 0, 1)
        planes, self.channels, u, v = stack.shape
        self.frames = max(1, pattern.frames)
        self.volume_shape = (planes, u, v)
        if planes % self.frames:
            raise AcquisitionError(
                f"{planes} planes do not divide into the pattern's {self.frames} frames.",
                "axis plane",
                "Give as many planes for every frame, frame by frame.",
            )
        self.stack = stack.reshape(self.frames, planes // self.frames, self.channels, u, v)
        self.names = ("axis u", "axis v")

    @staticmethod
    def _check_channels(array: Array, axis: int) -> None:
        if not -array.ndim <= axis < array.ndim:
            raise AcquisitionError(
                f"There is no channel axis {axis} in data of {array.ndim} axes.",
                "channel_axis",
                f"Axes of shape {array.shape} are counted from 0.",
            )
        if array.shape[axis] < 2:
            raise AcquisitionError(
                f"Channel axis {axis} has length {array.shape[axis]} (shape {array.shape}).",
                "channel_axis",
                "Name the axis that holds two or more channels, or leave the channel axis out.",
            )

    @property
    def frame_planes(self) -> int:
        """Planes of one frame."""
        return int(self.stack.shape[1])

    @property
    def planes(self) -> int:
        """Planes of all frames."""
        return self.frames * self.frame_planes

    @property
    def grid(self) -> tuple[int, int]:
        """(u, v) of a plane."""
        return (int(self.stack.shape[3]), int(self.stack.shape[4]))

    def blocks(self, channels: int) -> Iterator[tuple[slice, Array]]:
        """Slices of planes with images of shape (planes, channels of the file, u, v)."""
        u, v = self.grid
        step = max(1, _BLOCK_BYTES // (channels * u * v * self.dtype.itemsize))
        for frame in range(self.frames):
            first = frame * self.frame_planes
            for start in range(0, self.frame_planes, step):
                stop = min(start + step, self.frame_planes)
                yield slice(first + start, first + stop), self.stack[frame, start:stop]


def _check_array(given: Any) -> None:
    """Refuse what is neither scan nor array; frames given one by one are told apart."""
    if isinstance(given, np.ndarray):
        return
    shapes = [np.shape(part) for part in given] if isinstance(given, list | tuple) else []
    for frame, shape in enumerate(shapes):
        if shape != shapes[0]:
            raise AcquisitionError(
                f"Frames are on different grids: frame 0 has shape {shapes[0]}, frame {frame} has "
                f"{shape}.",
                f"frame {frame}",
                "Bring all frames to one grid and stack them in one array.",
            )
    raise AcquisitionError(
        f"A scan or an array is needed, got {type(given).__name__}.",
        "data",
        "Give a stack (plane, u, v), frames one after the other.",
    )


def pattern_masks(source: Source, pattern: Pattern) -> tuple[NDArray[np.bool_], NDArray[np.intp]]:
    """Mask of shape (pattern, u, v or 1) and which of them each plane has."""
    for axis, count in enumerate(pattern.grid):
        if count != source.grid[axis]:
            raise AcquisitionError(
                f"The pattern has {count} positions along {source.names[axis]}, which has "
                f"{source.grid[axis]}.",
                source.names[axis],
                "Draw the pattern for the scan's grid.",
            )
    masks = by_frame(source, pattern, pattern.mask)
    frames = np.repeat(np.arange(source.frames), source.frame_planes)
    if not pattern.frames:
        return masks, np.zeros(source.planes, dtype=np.intp)
    if pattern.frames != source.frames:
        raise AcquisitionError(
            f"The pattern has {pattern.frames} frames, the scan has {source.frames}.",
            "frame axis",
            "Draw the pattern with the scan's number of frames.",
        )
    return masks, frames.astype(np.intp)


def by_frame(source: Source, pattern: Pattern, values: Array) -> Array:
    """Values of the pattern's positions as (pattern, u, v or 1)."""
    framed = values if pattern.frames else values[None]
    return framed if source.two_d else framed[:, :, None]
