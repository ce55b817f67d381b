"""Partial Fourier: the missing end of k-space from the object's smooth phase.

An image of phase phi(r) times a real image has, after division by the phase, Hermitian k-space. The
fully sampled centre gives phi at low resolution.

* ``homodyne`` weights the one-sided samples by 2 and the centre by a linear ramp from 0 to 2, and
  keeps the part of the image in phase with phi: one step, one partial axis.
* ``pocs`` puts the image on phase phi and the samples back, in turn, until it stands still: one or
  both axes.

Sources: Noll, Nishimura, Macovski 1991, IEEE Trans Med Imaging 10:154-163, doi 10.1109/42.79473;
Haacke, Lindskog, Lin 1991, J Magn Reson 92:126-145, doi 10.1016/0022-2364(91)90253-P.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import Encoding, blocks
from mrics.encoding.acquisition import Acquisition
from mrics.errors import RecoveryError
from mrics.numerics import fft_planes, ifft_planes, map_blocks
from mrics.recovery.contract import Certificate, Recovered
from mrics.recovery.settings import Homodyne, Pocs

Array = NDArray[Any]


@dataclass(frozen=True)
class _Reach:
    """Acquired range of one axis, in steps from zero frequency, both ends acquired."""

    count: int
    low: int
    high: int

    @property
    def full(self) -> bool:
        return self.high - self.low + 1 == self.count

    @property
    def half(self) -> int:
        """Frequencies -half ... half are acquired."""
        return min(-self.low, self.high)

    @property
    def steps(self) -> NDArray[np.int64]:
        """Frequency of each un-centred index."""
        k = np.arange(self.count)
        return np.where(k < self.count - self.count // 2, k, k - self.count)


def solve(acquisition: Acquisition, settings: Homodyne | Pocs, sigma: float) -> Recovered:
    """Image by the method the settings belong to; every channel by itself, then combined.

    Raises
    ------
    RecoveryError
        Where the acquired positions are not one contiguous box across zero frequency, or
        ``homodyne`` is given two partial axes.
    """
    reaches = _reaches(acquisition)
    if isinstance(settings, Pocs):
        return _pocs(acquisition, reaches, settings)
    return _homodyne(acquisition, reaches)


def _homodyne(acquisition: Acquisition, reaches: tuple[_Reach, _Reach]) -> Recovered:
    if sum(not r.full for r in reaches) > 1:
        raise RecoveryError(
            "Homodyne recovers one partial axis; the pattern is partial along u and v.",
            "pattern",
            "Use pocs.",
        )
    ramp = np.ones(tuple(r.count for r in reaches))
    for axis, reach in enumerate(reaches):
        if not reach.full:
            ramp = ramp * _along(_ramp(reach), axis)

    def one(kspace: Array, window: Array) -> tuple[Array, int, float]:
        phase = _phase(ifft_planes(kspace * window, True))
        weighted = ifft_planes(kspace * ramp.astype(kspace.real.dtype), True)
        return (weighted * phase.conj()).real * phase, 0, 0.0

    image, _, _ = _over_planes(acquisition, reaches, one)
    return Recovered(image, Certificate("homodyne"))


def _pocs(acquisition: Acquisition, reaches: tuple[_Reach, _Reach], settings: Pocs) -> Recovered:
    """Projections in turn; the relative change of an iteration is what they stop on."""
    acquired = np.ones(tuple(r.count for r in reaches), bool)
    for axis, reach in enumerate(reaches):
        own = (reach.steps >= reach.low) & (reach.steps <= reach.high)
        acquired &= _along(own, axis)

    def one(kspace: Array, window: Array) -> tuple[Array, int, float]:
        phase = _phase(ifft_planes(kspace * window, True))
        image = ifft_planes(kspace)
        change, count = 1.0, 0
        while count < settings.iterations and change > settings.tolerance:
            count += 1
            spectrum = fft_planes((image * phase.conj()).real * phase, True)
            np.copyto(spectrum, kspace, where=acquired)
            new = ifft_planes(spectrum, True)
            size = float(np.linalg.norm(new))
            change = float(np.linalg.norm(new - image)) / size if size > 0 else 0.0
            image = new
        return image, count, change

    image, count, change = _over_planes(acquisition, reaches, one)
    certificate = Certificate(
        "pocs",
        iterations=count,
        final_change=change,
        optimality=change,
        tolerance=settings.tolerance,
        reached=change <= settings.tolerance,
    )
    return Recovered(image, certificate)


def _over_planes(
    acquisition: Acquisition, reaches: tuple[_Reach, _Reach], one: Any
) -> tuple[Array, int, float]:
    image = np.zeros(acquisition.shape, acquisition.kspace.dtype)
    window = np.ones(tuple(r.count for r in reaches))
    for axis, reach in enumerate(reaches):
        if not reach.full:
            window = window * _along(_low_pass(reach), axis)
    window = window.astype(image.real.dtype)
    worst, most = 0.0, 0
    for planes, encoding, data in blocks(acquisition):

        def plane(
            row: int, encoding: Encoding = encoding, data: Array = data, first: int = planes.start
        ) -> tuple[int, float]:
            found = [one(channel, window) for channel in data[row]]
            images = np.array([f[0] for f in found], dtype=image.dtype)
            image[first + row] = _combined(images, encoding, row)
            return max(f[1] for f in found), max(f[2] for f in found)

        for count, change in map_blocks(plane, range(encoding.in_shape[0])):
            most, worst = max(most, count), max(worst, change)
    return image, most, worst


def _combined(images: Array, encoding: Encoding, row: int) -> Array:
    if encoding.sensitivities is None:
        return np.asarray(images[0])
    maps = encoding.sensitivities[row if encoding.sensitivities.shape[0] > 1 else 0]
    energy = (maps.real**2 + maps.imag**2).sum(axis=0)
    top = (maps.conj() * images).sum(axis=0)
    return np.divide(top, energy, out=np.zeros_like(top), where=energy > 0)


def _reaches(acquisition: Acquisition) -> tuple[_Reach, _Reach]:
    """Acquired range along u and v, after checking that the pattern is one contiguous box."""
    mask = acquisition.mask[0]
    same = not (acquisition.mask != mask).any()
    grid = acquisition.shape[1:]
    found = []
    for axis, count in enumerate(grid):
        line = mask.any(axis=1 - axis)
        places = np.flatnonzero(line) if len(line) > 1 else np.arange(count)
        if len(places) == 0:
            places = np.array([0])
        found.append(_Reach(count, int(places[0]) - count // 2, int(places[-1]) - count // 2))
    box = mask[
        found[0].low + grid[0] // 2 : found[0].high + grid[0] // 2 + 1,
        found[1].low + grid[1] // 2 : found[1].high + grid[1] // 2 + 1,
    ]
    if not same or not box.all() or min(r.half for r in found) < 1:
        raise RecoveryError(
            "The pattern is not partial Fourier: it must hold one contiguous range per axis that "
            "reaches across zero frequency, the same for all frames.",
            "pattern",
            "Draw a partial-Fourier pattern without undersampling, or use another recovery.",
        )
    return found[0], found[1]


def _along(values: Array, axis: int) -> Array:
    return values[:, None] if axis == 0 else values[None, :]


def _ramp(reach: _Reach) -> NDArray[np.float64]:
    """0 on the missing side, linear across the centre, 2 on the far side; w(k) + w(-k) = 2."""
    side = reach.steps if reach.high >= -reach.low else -reach.steps
    ramp = np.clip(1 + side / (reach.half + 1), 0.0, 2.0)
    if reach.count % 2 == 0:
        # The lowest frequency of an even axis is its own mirror.
        ramp[reach.steps == -(reach.count // 2)] = 1.0 if reach.low == -(reach.count // 2) else 0.0
    return ramp


def _low_pass(reach: _Reach) -> NDArray[np.float64]:
    """Raised cosine over the symmetric centre."""
    k = np.abs(reach.steps)
    return np.where(k <= reach.half, np.cos(np.pi * k / (2 * (reach.half + 1))) ** 2, 0.0)


def _phase(image: Array) -> Array:
    modulus = np.abs(image)
    return np.divide(image, modulus, out=np.ones_like(image), where=modulus > 0)
