"""What several checks need of a scan, computed once."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from functools import cached_property, wraps
from typing import Any, TypeVar

import numpy as np
import scipy
from numpy.typing import NDArray

from mrics.numerics import centred_fft, map_blocks
from mrics.numerics.scaling import usual_size
from mrics.scan.fitness.edges import Edge, profile_edge, spectrum_edge
from mrics.scan.fitness.spectrum import (
    Correlation,
    LineSpectrum,
    line_spectrum,
    noise_correlation,
)
from mrics.scan.mask import body_mask
from mrics.scan.noise import Noise, choose_noise, first_volume, noise_estimates
from mrics.scan.volume import LETTERS, Axes, Scan

_T = TypeVar("_T")
_BLOCK = 16
_LENGTHS = (64, 48, 32)
# Fall of power in a k-space profile that counts as its end, dB: rounding leaves 20 dB and more
# below noise.
PROFILE_DB = 6.5
# The same in the detail of a magnitude image: in tissue the end survives at 20 dB and more.
DETAIL_DB = 12.0


def _once(method: Callable[[Any, int], _T]) -> Callable[[Any, int], _T]:
    """Keep a method's result for each axis on the object itself."""

    @wraps(method)
    def kept(self: Any, axis: int) -> _T:
        key = (method.__name__, axis)
        if key not in self.results:
            self.results[key] = method(self, axis)
        return self.results[key]

    return kept


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
        # No finding tells a value in the scan's unit, so the checks may work on another scale.
        values, self.exponent = usual_size(scan.data)
        self.scan = replace(scan, data=values)
        self.axes = axes
        self.volume: NDArray[Any] = first_volume(self.scan)
        self.results: dict[tuple[str, int], Any] = {}

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
    def noise_estimates(self) -> dict[str, Noise]:
        """Every noise estimate that the scan allows, by its method."""
        return noise_estimates(self.scan, self.mask)

    @property
    def noise(self) -> Noise:
        """The noise estimate to believe."""
        return choose_noise(self.noise_estimates)

    @property
    def has_phase(self) -> bool:
        """Whether any imaginary part differs from zero."""
        return bool(np.iscomplexobj(self.volume))

    @_once
    def power(self, axis: int) -> NDArray[np.float64]:
        """Mean power of centred k-space along one axis, over all lines of the volume.

        Only that axis is transformed: by Parseval the mean over the other axes is the same in
        image and k-space.
        """
        across = max((a for a in range(3) if a != axis), key=lambda a: self.volume.shape[a])
        others = tuple(a for a in range(3) if a != axis)

        def part(start: int) -> NDArray[np.float64]:
            index: list[Any] = [slice(None)] * 3
            index[across] = slice(start, start + _BLOCK)
            lines = centred_fft(self.volume[tuple(index)], (axis,))
            squared = np.square(lines.real) + np.square(lines.imag)
            return squared.sum(axis=others, dtype=np.float64)

        blocks = range(0, self.volume.shape[across], _BLOCK)
        total = np.sum(map_blocks(part, blocks), axis=0)
        return total * self.volume.shape[axis] / self.volume.size

    def profile_edges(self, axis: int) -> tuple[Edge, Edge]:
        """Edges of the k-space profile on the positive and the negative side."""
        power = self.power(axis)
        centre = len(power) // 2
        return profile_edge(power[centre:]), profile_edge(power[centre::-1])

    @cached_property
    def inside(self) -> NDArray[np.bool_]:
        """The body without its outer two voxels; the volume's border is no edge of the body."""
        return scipy.ndimage.binary_erosion(self.mask, iterations=2, border_value=1)

    @_once
    def detail_spectrum(self, axis: int) -> LineSpectrum | None:
        """Spectrum along an axis of what lies inside the body, by the longest lines that fit."""
        for length in _LENGTHS:
            spectrum = line_spectrum(self.volume, self.inside, axis, length)
            if spectrum is not None:
                return spectrum
        return None

    def detail_edge(self, axis: int, lowest: float = 0.3, highest: float = 0.95) -> Edge | None:
        """Largest step of :meth:`detail_spectrum`, or None where lines are too short."""
        spectrum = self.detail_spectrum(axis)
        return None if spectrum is None else spectrum_edge(spectrum, lowest, highest)

    @_once
    def correlation(self, axis: int) -> Correlation | None:
        """Correlation of noise along an axis: of the whole scan with phase, of the body without.

        Exact zeros are left out.
        """
        region = self.magnitude > 0
        return noise_correlation(
            self.volume, region if self.has_phase else region & self.mask, axis
        )
