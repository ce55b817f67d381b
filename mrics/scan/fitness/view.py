"""What several checks need of a scan, computed once."""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.numerics import centred_fft, map_blocks
from mrics.scan.mask import body_mask
from mrics.scan.noise import Noise, scan_noise
from mrics.scan.volume import LETTERS, Axes, Scan

_BLOCK = 16


class ScanView:
    """A scan as the checks look at it: its first frame and channel, with cached products.

    Parameters
    ----------
    scan : Scan
        Any scan.
    axes : Axes
        Names of the readout, phase and partition axes.
    """

    def __init__(self, scan: Scan, axes: Axes) -> None:
        self.scan = scan
        self.axes = axes
        volume = scan.data
        while volume.ndim > 3:
            volume = volume[..., 0]
        self.volume: NDArray[Any] = volume

    @property
    def encoded(self) -> tuple[int, ...]:
        """Numbers of the axes that the sequence Fourier-encodes (not the slice axis of 2-D)."""
        named = (self.axes.readout, self.axes.phase, self.axes.partition)
        return tuple(LETTERS.index(c) for c in named if c is not None)

    @cached_property
    def magnitude(self) -> NDArray[np.float32]:
        """Magnitude of :attr:`volume`."""
        return np.abs(self.volume).astype(np.float32, copy=False)

    @cached_property
    def mask(self) -> NDArray[np.bool_]:
        """Body mask of :attr:`volume`."""
        return body_mask(self.magnitude)

    @cached_property
    def noise(self) -> Noise:
        """Noise of :attr:`volume`."""
        return scan_noise(self.scan, self.mask)

    @cached_property
    def has_phase(self) -> bool:
        """Whether any imaginary part differs from zero."""
        return bool(np.iscomplexobj(self.volume) and self.volume.imag.any())

    def power(self, axis: int) -> NDArray[np.float64]:
        """Mean power of centred k-space along one axis, over all lines of the volume.

        Only that axis is transformed: by Parseval the mean over the other axes is the same in
        image and k-space.
        """
        if axis not in self._powers:
            across = max((a for a in range(3) if a != axis), key=lambda a: self.volume.shape[a])
            length = self.volume.shape[across]

            def part(start: int) -> NDArray[np.float64]:
                index: list[Any] = [slice(None)] * 3
                index[across] = slice(start, start + _BLOCK)
                lines = centred_fft(self.volume[tuple(index)], (axis,))
                others = tuple(a for a in range(3) if a != axis)
                squared = lines.real.astype(np.float64) ** 2 + lines.imag.astype(np.float64) ** 2
                return squared.sum(axis=others)

            total = np.sum(map_blocks(part, range(0, length, _BLOCK)), axis=0)
            self._powers[axis] = total * self.volume.shape[axis] / self.volume.size
        return self._powers[axis]

    @cached_property
    def _powers(self) -> dict[int, NDArray[np.float64]]:
        return {}
