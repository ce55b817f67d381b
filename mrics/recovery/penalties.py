"""Penalty halves of the splitting: orthonormal wavelets, total variation."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.numerics.wavelets import PlaneWavelet
from mrics.recovery import penalty_kernels

Array = NDArray[Any]
_LEAST_COARSE = 5
_MOST_LEVELS = 4
#: shrinkage threshold of the splitting relative to the RMS of the first image's coefficients
_THRESHOLD = 1.0
_GRADIENT_THRESHOLD = 0.7


def levels_for(shape: tuple[int, int]) -> int:
    """Levels that leave at least 5 samples along the shorter axis, between 1 and 4."""
    return int(np.clip(np.floor(np.log2(min(shape) / _LEAST_COARSE)), 1, _MOST_LEVELS))


def padded_shape(shape: tuple[int, int], levels: int) -> tuple[int, int]:
    """Smallest plane of multiples of 2^levels that holds ``shape``."""
    step = 2**levels
    return (-(-shape[0] // step) * step, -(-shape[1] // step) * step)


def bands_of(shape: tuple[int, int], levels: int) -> NDArray[np.int64]:
    """Row and column ranges of the packed bands, finest first, the approximation last."""
    rows = []
    a, b = shape
    for _ in range(levels):
        a, b = a // 2, b // 2
        rows += [(0, a, b, 2 * b), (a, 2 * a, 0, b), (a, 2 * a, b, 2 * b)]
    return np.array([*rows, (0, a, 0, b)], dtype=np.int64)


class OrthonormalWavelet:
    """L1 of periodized orthonormal wavelet coefficients, the coarsest approximation free.

    ``scales``: factors of the weight, finest level first; ones if left out.
    """

    def __init__(
        self,
        shape: tuple[int, int],
        real: Any,
        wavelet: str,
        levels: int,
        scales: Sequence[float] | None = None,
    ) -> None:
        self.real = np.dtype(real)
        self.padded = padded_shape(shape, levels)
        self.levels = levels
        self.factors = np.repeat(np.ones(levels) if scales is None else np.array(scales), 3)
        dtype = np.complex64 if self.real == np.float32 else np.complex128
        self.transform = PlaneWavelet(self.padded, wavelet, levels, dtype)
        self.bands = bands_of(self.padded, levels)
        self.size = (self.padded[0], 2 * self.padded[1])
        self.state, self.coefficients = (np.empty(self.size, self.real) for _ in range(2))
        self.weights = np.zeros(len(self.bands), self.real)
        self.symbol = np.zeros((1, 1), self.real)
        self.sums = np.zeros(6)

    def analyse(self, image: Array, coefficients: Array) -> None:
        """Coefficients (rows, 2 columns) of a plane."""
        self.transform.analyse(image, coefficients)

    def synthesise(self, coefficients: Array, image: Array) -> None:
        """Adjoint of :meth:`analyse`."""
        self.transform.synthesise(coefficients, image)

    def balance(self, weight: float, coefficients: Array) -> Array:
        """Set the bands' weights and, by the size of ``coefficients``, rho; rho of every band."""
        self.weights[:-1] = weight * self.factors
        coarse = coefficients[..., : self.bands[-1, 1], : 2 * self.bands[-1, 3]]
        energy = float(np.vdot(coefficients, coefficients)) - float(np.sum(coarse**2))
        count = self.state.size // 2 - int(np.prod(coarse.shape[-2:])) // 2
        self.rho = self.real.type(weight / (_THRESHOLD * np.sqrt(max(energy, 0) / count)))
        self.symbol[...] = self.rho
        return np.full(len(self.bands), self.rho, self.real)

    def set_weight(self, weight: float, image: Array) -> None:
        """See :class:`splitting.Penalty`."""
        self.analyse(image, self.state)
        self.balance(weight, self.state)
        self.coefficients[...] = self.state
        self._split(0.0)

    def pull(self, image: Array) -> None:
        """See :class:`splitting.Penalty`."""
        self.transform.synthesise(self.coefficients, image)

    def push(self, image: Array, relax: float) -> Array:
        """See :class:`splitting.Penalty`."""
        self.transform.analyse(image, self.coefficients)
        self._split(relax)
        return self.sums

    def shrunk(self, image: Array) -> None:
        """Fill ``image`` with K^H z; :attr:`shrunk_norm` is the penalty of z."""
        self.coefficients *= 1 / self.rho
        self.coefficients += self.state
        self.coefficients *= self.real.type(0.5)
        self.transform.synthesise(self.coefficients, image)

    def _split(self, relax: float) -> None:
        self.shrunk_norm = penalty_kernels.split_bands(
            self.state, self.coefficients, self.bands, self.weights, self.rho,
            self.real.type(relax), self.sums,
        )  # fmt: skip


class Variation:
    """Isotropic total variation of the complex plane, periodic forward differences."""

    def __init__(self, shape: tuple[int, int], real: Any) -> None:
        self.real = np.dtype(real)
        self.padded = shape
        u, v = (4 * np.sin(np.pi * np.arange(n) / n) ** 2 for n in shape)
        self.differences = (u[:, None] + v).astype(self.real)
        self.symbol = np.empty_like(self.differences)
        self.state = np.empty((2, shape[0], 2 * shape[1]), self.real)
        self.pulled = np.empty((shape[0], 2 * shape[1]), self.real)
        self.sums = np.zeros(6)

    def set_weight(self, weight: float, image: Array) -> None:
        """See :class:`splitting.Penalty`."""
        plane = image.reshape(*self.padded, 2)
        for axis in (0, 1):
            ahead = np.roll(plane, -1, axis)
            np.subtract(ahead, plane, out=self.state[axis].reshape(plane.shape))
        energy = float(np.vdot(self.state, self.state))
        count = self.padded[0] * self.padded[1]
        self.weight = self.real.type(weight)
        # A constant image has no gradient: any step will do.
        typical = float(np.sqrt(energy / count)) or 1.0
        self.rho = self.real.type(weight / (_GRADIENT_THRESHOLD * typical))
        np.multiply(self.differences, self.rho, out=self.symbol)
        self.pulled[...] = image
        penalty_kernels.split_gradient(
            self.state, self.pulled, self.weight, self.rho, self.real.type(0), self.sums
        )

    def pull(self, image: Array) -> None:
        """See :class:`splitting.Penalty`."""
        image[...] = self.pulled

    def push(self, image: Array, relax: float) -> Array:
        """See :class:`splitting.Penalty`."""
        self.pulled[...] = image
        penalty_kernels.split_gradient(
            self.state, self.pulled, self.weight, self.rho, self.real.type(relax), self.sums
        )
        return self.sums
