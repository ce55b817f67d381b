"""Penalty half of the splitting for second-order total generalised variation.

The field w of the penalty's inner minimum is found together with the image: for given h its
optimum is a 2 x 2 system at every spatial frequency, so that it is eliminated and the data half
sees a symbol over k-space like that of any other penalty.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.numerics import fft_planes, ifft_planes
from mrics.recovery import second_order_kernels as kernels

Array = NDArray[Any]
#: weight of the field's derivative relative to the weight (Bredies et al. 2010; Knoll et al. 2011)
RATIO = 2.0
#: shrinkage thresholds of the splitting relative to the RMS of the first image's derivatives
_THRESHOLDS = (0.3, 0.3)


class SecondOrder:
    """See :class:`splitting.Penalty`; periodic differences on planes of any size."""

    def __init__(self, shape: tuple[int, int], real: Any) -> None:
        self.real = np.dtype(real)
        self.padded = shape
        self.dtype = np.complex64 if self.real == np.float32 else np.complex128
        self._steps = [1 - np.exp(-2j * np.pi * np.arange(n) / n) for n in shape]
        self._down, self._right = (
            step.astype(self.dtype).view(self.real).reshape(-1, 2) for step in self._steps
        )
        size = (shape[0], 2 * shape[1])
        self.symbol = np.empty(shape, self.real)
        self.state, self._dual = np.zeros((5, *size), self.real), np.zeros((5, *size), self.real)
        self._field, self._plane = np.zeros((2, *shape), self.dtype), np.empty(shape, self.dtype)
        self._weights, self._rhos = np.ones(2, self.real), np.ones(3, self.real)
        self.sums = np.zeros(6)

    def set_weight(self, weight: float, image: Array) -> None:
        """See :class:`splitting.Penalty`."""
        self._weights[:] = weight, RATIO * weight
        plane = image.view(self.dtype)
        first = [np.roll(plane, -1, axis) - plane for axis in (0, 1)]
        second = [d - np.roll(d, 1, axis) for axis, d in enumerate(first)]
        for order, parts in enumerate((first, second)):
            energy = sum(float(np.vdot(d, d).real) for d in parts)
            rms = np.sqrt(energy / plane.size)
            self._rhos[order] = self._weights[order] / (_THRESHOLDS[order] * max(rms, 1e-30))
        self._rhos[2] = self._rhos[1] / 2
        self.symbol[...] = self._eliminated_symbol()
        self.state[...] = 0
        self._field[...] = 0
        for band, d in enumerate(first):
            self.state[band] = d.view(self.real)
        self._move(image, 0.0)

    def pull(self, image: Array) -> None:
        """See :class:`splitting.Penalty`."""
        kernels.pull_second(self._dual, image, self._field.view(self.real))
        self._field = fft_planes(self._field, overwrite=True)
        kernels.eliminate(
            self._field.view(self.real), self._down, self._right, self._rhos,
            self._plane.view(self.real),
        )  # fmt: skip
        self._plane = ifft_planes(self._plane, overwrite=True)
        image += self._plane.view(self.real)

    def push(self, image: Array, relax: float) -> Array:
        """See :class:`splitting.Penalty`."""
        self._plane[...] = image.view(self.dtype)
        self._plane = fft_planes(self._plane, overwrite=True)
        kernels.substitute(
            self._plane.view(self.real), self._field.view(self.real), self._down, self._right,
            self._rhos,
        )  # fmt: skip
        self._field = ifft_planes(self._field, overwrite=True)
        self._move(image, relax)
        return self.sums

    def _move(self, image: Array, relax: float) -> None:
        kernels.push_second(
            image, self._field.view(self.real), self.state, self._dual, self._weights, self._rhos,
            self.real.type(relax), self.sums,
        )  # fmt: skip

    def _eliminated_symbol(self) -> Array:
        """Largest quadratic form left for x: rho_1 |D|^2 less what the field's optimum takes."""
        down, right = self._steps[0][:, None], self._steps[1][None]
        first, second = float(self._rhos[0]), float(self._rhos[1])
        r2, c2 = np.abs(down) ** 2, np.abs(right) ** 2
        a, b = first + second * (r2 + c2 / 2), first + second * (c2 + r2 / 2)
        mixed = second * np.conj(right) * down / 2
        # D is -conj of the backward symbols
        p, q = -np.conj(down), -np.conj(right)
        form = (b * r2 + a * c2 - 2 * (np.conj(p) * mixed * q).real) / (a * b - np.abs(mixed) ** 2)
        return first * (r2 + c2) - first**2 * form
