"""Translation-invariant wavelet penalty: undecimated bands, the coarsest approximation free.

Full cycle spinning: the mean over all shifts s of sum |W S_s x| (W orthonormal, details only)
equals sum_l 2^-l ||K_l x||_1 over levels l = 1 .. J, where K_l are the bands of the undecimated
transform scaled to a Parseval frame. The frame is periodic on the plane itself, of any size.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.numerics.wavelets import filters
from mrics.recovery import frame_kernels

Array = NDArray[Any]
#: threshold of the bands by themselves
_THRESHOLD = 0.6


class FrameWavelet:
    """Penalty half of the splitting (:class:`splitting.Penalty`).

    ``scales``: factors of the weight, finest level first; ones if left out. ``threshold``: of the
    shrinkage, relative to the RMS of the first image's coefficients; it changes the speed alone.
    """

    def __init__(
        self,
        shape: tuple[int, int],
        real: Any,
        wavelet: str,
        levels: int,
        scales: Sequence[float] | None = None,
        threshold: float = _THRESHOLD,
    ) -> None:
        self.real = np.dtype(real)
        self.padded = shape
        self.levels, self.threshold = levels, threshold
        self.factors = 0.5 ** np.arange(1, levels + 1)
        if scales is not None:
            self.factors *= np.array(scales)
        low, high = filters(wavelet, self.real.name)
        root = self.real.type(np.sqrt(0.5))
        self.low = tuple(self.real.type(tap * root) for tap in low)
        self.high = tuple(self.real.type(tap * root) for tap in high)
        taps = len(low)
        n0, n1 = shape
        size = (n0, 2 * n1)
        self.size = (levels * 3 * n0, 2 * n1)
        self.bands = np.array(
            [(3 * n0 * level, 3 * n0 * (level + 1), 0, n1) for level in range(levels)]
        )
        self.state = np.empty((levels, 3, *size), self.real)
        self._planes = np.empty((4, *size), self.real)
        self._taps = np.empty((2 * taps, 2 * n1), self.real)
        reach = 2 * (n1 + (taps - 1) * 2 ** (levels - 1))
        # Arrays of their own: a loop that reads and writes one array would not become vectors.
        self._lines = tuple(np.empty(reach, self.real) for _ in range(5))
        self._power = self._bands_power()
        self.symbol = np.empty(shape, self.real)
        self.rho = np.ones(levels, self.real)
        self.weights = np.ones(levels, self.real)
        self.sums = np.zeros(6)

    def analyse(self, image: Array, coefficients: Array) -> None:
        """Bands of a plane, stacked as rows: (levels * 3 * rows, 2 columns)."""
        coefficients[...] = 0
        one = np.ones(self.levels, self.real)
        self._pass(image, 1.0, one, coefficients.reshape(self.state.shape), huge=True)

    def synthesise(self, coefficients: Array, image: Array) -> None:
        """Adjoint of :meth:`analyse`."""
        bands, one = coefficients.reshape(self.state.shape), np.ones(self.levels, self.real)
        self._pull(image, bands, 0 * one, one)

    def balance(self, weight: float, coefficients: Array) -> Array:
        """Set the bands' weights and, by the size of ``coefficients``, rho; rho of every band."""
        self.weights[:] = weight * self.factors
        bands = coefficients.reshape(-1, *self.state.shape)
        count = self.state[0].size // 2
        for level in range(self.levels):
            energy = sum(float(np.vdot(one, one)) for one in bands[:, level])
            rms = np.sqrt(energy / count)
            self.rho[level] = self.weights[level] / (self.threshold * max(rms, 1e-30))
        self.symbol[...] = np.tensordot(self.rho, self._power, 1)
        return self.rho

    def set_weight(self, weight: float, image: Array) -> None:
        """See :class:`splitting.Penalty`."""
        self.analyse(image, self.state.reshape(self.size))
        self.balance(weight, self.state)

    def pull(self, image: Array) -> None:
        """See :class:`splitting.Penalty`."""
        self._pull(image, self.state, self.weights, self.rho)

    def push(self, image: Array, relax: float) -> Array:
        """See :class:`splitting.Penalty`."""
        self._pass(image, relax, self.rho, self.state)
        return self.sums

    def _pull(self, image: Array, state: Array, weights: Array, rho: Array) -> None:
        plane = self._planes[2]
        for level in range(self.levels - 1, -1, -1):
            target = image if level == 0 else self._planes[2 + level % 2]
            frame_kernels.frame_pull(
                plane, state[level], 2**level, self.low, self.high, weights[level],
                rho[level], self._planes[0], self._planes[1], self._taps, self._lines,
                target, level == self.levels - 1,
            )  # fmt: skip
            plane = target

    def _pass(
        self, image: Array, relax: float, rho: Array, state: Array, huge: bool = False
    ) -> None:
        self.sums[:] = 0
        source = image
        for level in range(self.levels):
            target = self._planes[level % 2]
            weight = self.real.type(1e-30) if huge else self.weights[level]
            frame_kernels.frame_push(
                source, state[level], 2**level, self.low, self.high, weight, rho[level],
                self.real.type(relax), target, self._taps, self._lines, self.sums,
            )  # fmt: skip
            source = target

    def _bands_power(self) -> Array:
        """|K_l|^2 over un-centred k-space for each level, from the taps' transforms."""
        low = np.array(self.low, float)
        approximation = np.ones(self.padded)
        power = np.empty((self.levels, *self.padded))
        for level in range(self.levels):
            gains = []
            for n in self.padded:
                angle = 2 * np.pi * 2**level * np.outer(np.arange(n), np.arange(len(low))) / n
                gains.append(np.abs(np.exp(1j * angle) @ low) ** 2)
            following = approximation * np.outer(*gains)
            power[level] = approximation - following
            approximation = following
        return power.astype(self.real)
