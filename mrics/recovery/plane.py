"""One plane's data step with its own memory, and running a solver over all planes in threads.

A plane of 256 x 256 and everything an iteration touches fits a core's cache, so each thread takes
one plane and runs the whole loop on it, in place.
"""

from __future__ import annotations

from collections.abc import Callable
from queue import SimpleQueue
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import Encoding, blocks
from mrics.encoding.acquisition import Acquisition
from mrics.errors import RecoveryError
from mrics.numerics import fft_planes, ifft_planes, map_blocks, threads
from mrics.recovery import kernels

Array = NDArray[Any]
#: penalty of the splitting u = F S x over the mean of rho K^H K, and its bounds relative to the
#: largest sum |S|^2
_CHANNEL_PENALTY, _LEAST_PENALTY, _MOST_PENALTY = 1.3, 0.02, 0.1
_BLOCK_BYTES = 64 * 2**20


class PlaneModel:
    """Data term 1/2 ||M F S x - d||^2 of one plane.

    Where whole readout lines are acquired the transform along the readout commutes with the
    pattern: with ``hybrid`` data are brought to (u frequency, v position) once and only u is
    transformed in every iteration.

    Parameters
    ----------
    shape : tuple of int
        (channel, u, v).
    dtype : complex64 or complex128
    padded : tuple of int, optional
        Size of :attr:`image`, at least (u, v); what lies outside (u, v) is not seen by the data.
    centre : tuple of int, optional
        Length along (u, v) of the samples that a smooth phase is taken from; :attr:`image` is then
        real, and the recovered image is it times that phase.
    """

    def __init__(
        self,
        shape: tuple[int, int, int],
        dtype: Any,
        padded: tuple[int, int] | None = None,
        centre: tuple[int, int] | None = None,
    ) -> None:
        self.dtype = np.dtype(dtype)
        self.real = np.dtype(self.dtype.type(0).real.dtype)
        self.channels, self.u, self.v = shape
        self.padded = padded or (self.u, self.v)
        self.image = np.zeros(self.padded, self.dtype)
        self.flat = self.image.view(self.real)
        self.inner = self.image[: self.u, : self.v]
        whole = self.padded == (self.u, self.v)
        self.work = self.image if whole else np.empty((self.u, self.v), self.dtype)
        self.maps: Array | None = None
        self.bound = 1.0
        self.centre = centre
        self.turn: Array | None = None
        self.axes: tuple[int, ...] = (-2, -1)

    def load(
        self, encoding: Encoding, data: Array, plane: int, unit: float, hybrid: bool = True
    ) -> bool:
        """Take up one plane of a block, divided by ``unit``.

        False where all its data or all its sensitivities are 0: its image is 0.
        """
        self.mask = np.ascontiguousarray(
            encoding.mask[plane if encoding.mask.shape[0] > 1 else 0, 0], self.real
        )
        self.axes = (-2,) if hybrid and self.mask.shape[1] == 1 else (-2, -1)
        self.data = data[plane]
        self.channels = self.data.shape[0]
        if not self.data.any():
            return False
        self.data *= self.mask / self.real.type(unit)
        maps = encoding.sensitivities
        if maps is not None:
            maps = maps[plane if maps.shape[0] > 1 else 0]
        if self.centre is not None:
            self.turn = smooth_phase(self.data, maps, self.centre)
            maps = self.turn[None] if maps is None else maps * self.turn
        if self.axes == (-2,):
            self.data = ifft_planes(self.data, overwrite=True, axes=(-1,))
        if maps is not None:
            self.maps = maps
            energy = (self.maps.real**2 + self.maps.imag**2).sum(0)
            self.bound = float(energy.max())
            if self.bound == 0:
                return False
            self._make_channels(energy)
        return True

    def gradient(self) -> None:
        """Replace :attr:`image` by A^H (A image - d); 0 outside (u, v)."""
        if self.maps is None:
            self._enter()
            spectrum = fft_planes(self.work, overwrite=True, axes=self.axes)
            kernels.residual(spectrum.view(self.real), self.data[0].view(self.real), self.mask)
            self._leave(ifft_planes(spectrum, overwrite=True, axes=self.axes))
        else:
            self._last[...] = self.image
            for c in range(self.channels):
                spectrum = self._channel_spectrum(c, self._last)
                kernels.residual(spectrum.view(self.real), self.data[c].view(self.real), self.mask)
                self._gather(c, spectrum, self.flat)
        self._outside(0)
        self._keep_real()

    def write(self, image: Array, unit: float, out: Array) -> None:
        """Recovered plane from :attr:`image` or a copy of it, in the data's unit."""
        np.multiply(image[: self.u, : self.v], self.real.type(unit), out=out)
        if self.turn is not None:
            out *= self.turn

    def start(self) -> None:
        """Set :attr:`image` to A^H d / bound."""
        self.image[...] = 0
        if self.maps is None:
            self.work[...] = self.data[0]
            self._leave(ifft_planes(self.work, overwrite=True, axes=self.axes))
            return
        self.gradient()
        self.image *= self.real.type(-1 / self.bound)

    def couple(self, symbol: Array) -> None:
        """Make ready for :meth:`solve` with :attr:`image` from :meth:`start`.

        Several channels: their splitting is fastest where its penalty is near rho K^H K (half the
        iterations of a fixed one at small weights).
        """
        if self.maps is not None:
            wanted = _CHANNEL_PENALTY * float(symbol.mean()) / self.bound
            self.mu = self.real.type(np.clip(wanted, _LEAST_PENALTY, _MOST_PENALTY))
            self._last[...] = self.image
            self._split(0.0, fill=True)

    def follow(self) -> None:
        """From :meth:`start` on, keep the spectrum of the penalty's state for :meth:`solve_both`.

        One channel only: the spectrum of A^H d is d.
        """
        if not hasattr(self, "_followed"):
            self._followed = np.empty((self.u, self.v), self.dtype)
        self._followed[...] = self.data[0]

    def solve_both(
        self, symbol: Array, relax: float
    ) -> tuple[tuple[float, float, float, float], float]:
        """:meth:`solve` for one channel and a number ``symbol``, and ||A K^H z - d||^2 before it.

        K^H K is 1, and ``relax`` what the penalty will move its state by.
        """
        self._outside(1 / float(symbol[0, 0]))
        self._enter()
        spectrum = fft_planes(self.work, overwrite=True, axes=self.axes)
        square, product, shrunk = kernels.solve_followed(
            spectrum.view(self.real), self._followed.view(self.real),
            self.data[0].view(self.real), self.mask, symbol[0, 0], self.real.type(relax),
        )  # fmt: skip
        self._leave(ifft_planes(spectrum, overwrite=True, axes=self.axes))
        return (square, square, product, 0.0), shrunk

    def solve(self, symbol: Array, relax: float) -> tuple[float, float, float, float]:
        """Data half of a splitting: :attr:`image` holds rho K^H h on entry, x on return.

        One channel: x minimises 1/2 ||A x - d||^2 + rho/2 ||K x - h||^2, by dividing in k-space.
        Several: the same for one step of the splitting u = F S x (see
        :func:`kernels.split_samples`), S completed to a multiple of a unitary map by a channel
        without data, so that x needs a division in k-space again.

        Parameters
        ----------
        symbol : ndarray, real, (1, 1) or (u, v)
            rho K^H K, a number or its values over un-centred k-space.
        relax : float
            Over-relaxation of the channel splitting.

        Returns
        -------
        tuple of float
            ||A x - d||^2; for a dual point p of the data term ||p||^2 and Re<p, d>; and a bound
            on the norm of A^H p + K^H q for the penalty's q = rho (K x - h).
        """
        if self.maps is not None:
            return self._solve_channels(symbol, relax)
        if self.work is not self.image:
            self._outside(1 / float(symbol[0, 0]))
        if symbol[0, 0] == 0 and self.mask[0, 0] == 0:
            symbol[0, 0] = symbol[0, 1]  # nothing tells the mean: it stays 0
        self._enter()
        spectrum = fft_planes(self.work, overwrite=True, axes=self.axes)
        square, product = kernels.solve_samples(
            spectrum.view(self.real), self.data[0].view(self.real), self.mask, symbol
        )
        self._leave(ifft_planes(spectrum, overwrite=True, axes=self.axes))
        return square, square, product, 0.0

    def _solve_channels(self, symbol: Array, relax: float) -> tuple[float, float, float, float]:
        real = self.real.type
        plus = self.mu * real(self.bound)
        scale = 1 / (plus + symbol[0, 0]) if symbol.size == 1 else real(1)
        kernels.blend(
            self.flat, self._gathered, self._last.view(self.real), self._gap, self.mu, scale
        )
        if symbol.size > 1:
            spectrum = fft_planes(self.image, overwrite=True)
            kernels.divide_symbol(spectrum.view(self.real), symbol, plus)
            back = ifft_planes(spectrum, overwrite=True)
            if not same_memory(back, self.image):
                self.image[...] = back
        self._keep_real()
        moved = kernels.replace_last(self.flat, self._gap, self._last.view(self.real))
        square, p_square, product, off = self._split(relax)
        slack = np.sqrt(self.bound * off) + float(self.mu) * np.sqrt(moved)
        return square, p_square, product, float(slack)

    def _split(self, relax: float, fill: bool = False) -> tuple[float, float, float, float]:
        """Channel half of the splitting at ``_last``; refreshes ``_gathered``."""
        sums = np.zeros(4)
        for c in range(self.channels):
            spectrum = self._channel_spectrum(c, self._last)
            if fill:
                self._state[c] = spectrum
            kernels.split_samples(
                spectrum.view(self.real), self._state[c].view(self.real),
                self.data[c].view(self.real), self.mask, self.mu, self.real.type(relax), sums,
            )  # fmt: skip
            self._gather(c, spectrum, self._gathered)
        return float(sums[0]), float(sums[1]), float(sums[2]), float(sums[3])

    def _make_channels(self, energy: Array) -> None:
        if not hasattr(self, "_state"):
            self._state = np.empty((self.channels, self.u, self.v), self.dtype)
            self._channel = np.empty((self.u, self.v), self.dtype)
            self._last = np.zeros(self.padded, self.dtype)
            self._gathered = np.zeros((self.padded[0], 2 * self.padded[1]), self.real)
            self._gap = np.empty(self.padded, self.real)
        self._gap[...] = self.bound
        self._gap[: self.u, : self.v] -= energy

    def _channel_spectrum(self, channel: int, image: Array) -> Array:
        assert self.maps is not None
        kernels.apply_map(
            image.view(self.real), self.maps[channel].view(self.real),
            self._channel.view(self.real),
        )  # fmt: skip
        return fft_planes(self._channel, overwrite=True, axes=self.axes)

    def _gather(self, channel: int, spectrum: Array, out: Array) -> None:
        assert self.maps is not None
        image = ifft_planes(spectrum, overwrite=True, axes=self.axes)
        kernels.gather_map(
            image.view(self.real), self.maps[channel].view(self.real), out, channel == 0
        )

    def _enter(self) -> None:
        if self.work is not self.image:
            self.work[...] = self.inner

    def _leave(self, image: Array) -> None:
        if not same_memory(image, self.image):
            self.inner[...] = image

    def _keep_real(self) -> None:
        """Both halves are real operators, so the optimum over real images is the real part."""
        if self.turn is not None:
            self.flat[:, 1::2] = 0

    def _outside(self, factor: float) -> None:
        if self.work is not self.image:
            self.image[self.u :] *= self.real.type(factor)
            self.image[: self.u, self.v :] *= self.real.type(factor)


def phase_centre(acquisition: Acquisition, phase: str) -> tuple[int, int] | None:
    """``centre`` of :class:`PlaneModel` for a setting ``phase``.

    Raises
    ------
    RecoveryError
        Where a smooth phase is asked for and there is no calibration region to take it from.
    """
    if phase == "free":
        return None
    along_u, along_v = (*acquisition.calibration, acquisition.calibration[0])[:2]
    if min(along_u, along_v) < 4:
        raise RecoveryError(
            f"A smooth phase needs a calibration region of at least 4 lines, got "
            f"{acquisition.calibration}.",
            "phase",
            'Draw the pattern with calibration lines, or take phase = "free".',
        )
    return along_u, min(along_v, acquisition.shape[2])


def smooth_phase(data: Array, maps: Array | None, centre: tuple[int, int]) -> Array:
    """exp(i phase) of the low-resolution image of un-centred samples (channel, u, v).

    The samples within ``centre`` are weighted by a Hann window and the channels combined by their
    sensitivities (Noll, Nishimura & Macovski 1991, doi:10.1109/42.79473).
    """
    _, u, v = data.shape
    window = np.ones((u, v), data.real.dtype)
    for axis, (n, length) in enumerate(zip((u, v), centre, strict=True)):
        k = np.minimum(np.arange(n), n - np.arange(n))
        taper = np.where(k < length / 2, np.cos(np.pi * k / length) ** 2, 0)
        window *= taper[:, None] if axis == 0 else taper
    low = ifft_planes(data * window, overwrite=True)
    combined = low[0] if maps is None else (np.conj(maps) * low).sum(0)
    phase: Array = np.exp(1j * np.angle(combined)).astype(data.dtype)
    return phase


def same_memory(one: Array, other: Array) -> bool:
    """True where two arrays start at the same address (an FFT in place hands back a new view)."""
    return bool(one.__array_interface__["data"][0] == other.__array_interface__["data"][0])


def scale_unit(acquisition: Acquisition) -> float:
    """Power of two near the largest sample (1 if all are 0): dividing by it rounds nothing."""
    largest = max(
        (float(np.abs(np.asarray(plane)).max()) for plane in acquisition.kspace), default=0.0
    )
    return float(2.0 ** np.round(np.log2(largest))) if largest > 0 else 1.0


def each_plane(
    acquisition: Acquisition,
    make: Callable[[], Any],
    solve: Callable[[Any, Encoding, Array, int, int], Any],
    together: int = 1,
) -> list[Any]:
    """Call ``solve(worker, encoding, data, i, plane)`` for every plane, over the threads.

    ``i`` is the plane's place in the block ``data``, ``plane`` in the stack; ``make`` builds one
    worker (its memory) per thread. With ``together`` above 1 that many planes go in one call, of
    which the first is named. Results come in plane order.
    """
    pool: SimpleQueue[Any] = SimpleQueue()
    for _ in range(min(threads(), acquisition.shape[0] // together)):
        pool.put(make())
    results: list[Any] = []
    kspace = acquisition.kspace
    one_call = together * int(np.prod(kspace.shape[1:])) * kspace.dtype.itemsize
    size = max(1, _BLOCK_BYTES // one_call) * one_call
    for planes, encoding, data in blocks(acquisition, size):

        def one(
            i: int, encoding: Encoding = encoding, data: Array = data, first: int = planes.start
        ) -> Any:
            worker = pool.get()
            try:
                return solve(worker, encoding, data, i, first + i)
            finally:
                pool.put(worker)

        results += map_blocks(one, range(0, data.shape[0], together))
    return results
