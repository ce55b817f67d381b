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
from mrics.numerics import fft_planes, ifft_planes, map_blocks, threads
from mrics.recovery import kernels

Array = NDArray[Any]


class PlaneModel:
    """Least-squares term 1/2 ||M F S x - d||^2 of one plane.

    Where whole readout lines are acquired the transform along the readout commutes with the
    pattern: data are brought to (u frequency, v position) once and only u is transformed after.

    Parameters
    ----------
    shape : tuple of int
        (channel, u, v).
    dtype : complex64 or complex128
    padded : tuple of int
        Size of the image buffers given to :meth:`gradient`; at least (u, v).
    """

    def __init__(
        self, shape: tuple[int, int, int], dtype: Any, padded: tuple[int, int] | None = None
    ) -> None:
        self.dtype = np.dtype(dtype)
        self.real = self.dtype.type(0).real.dtype
        self.channels, self.u, self.v = shape
        self.padded = padded or (self.u, self.v)
        self.image = np.zeros(self.padded, self.dtype)
        self.channel = np.empty((self.u, self.v), self.dtype)
        self.maps: Array | None = None
        self.bound = 1.0
        self.axes: tuple[int, ...] = (-2, -1)

    def load(self, encoding: Encoding, data: Array, plane: int, unit: float) -> bool:
        """Take up one plane of a block, divided by ``unit``; False where all its data are 0."""
        self.mask = np.ascontiguousarray(
            encoding.mask[plane if encoding.mask.shape[0] > 1 else 0, 0], self.real
        )
        self.axes = (-2,) if self.mask.shape[1] == 1 else (-2, -1)
        self.data = data[plane]
        if not self.data.any():
            return False
        self.data *= self.mask / self.real.type(unit)
        if self.axes == (-2,):
            self.data = ifft_planes(self.data, overwrite=True, axes=(-1,))
        maps = encoding.sensitivities
        if maps is not None:
            self.maps = maps[plane if maps.shape[0] > 1 else 0]
            self.bound = float((np.abs(self.maps) ** 2).sum(0).max())
        return True

    def gradient(self) -> tuple[float, float]:
        """Replace :attr:`image` by A^H (A image - d); return ||A image - d||^2, Re<., d>.

        Outside (u, v) of a padded buffer the gradient is 0.
        """
        inner = self.image[: self.u, : self.v]
        if self.maps is None:
            work = self.channel
            if self.padded == (self.u, self.v):
                work = self.image
            else:
                work[...] = inner
            square, product = self._residual(work, 0)
            if work is self.image:
                return square, product
            self.image[self.u :] = 0
            self.image[:, self.v :] = 0
            inner[...] = work
            return square, product
        square = product = 0.0
        source = self._image_copy()
        flat = self.image.view(self.real)
        for c in range(self.channels):
            maps = self.maps[c].view(self.real)
            kernels.apply_map(source, maps, self.channel.view(self.real))
            s, p = self._residual(self.channel, c)
            square += s
            product += p
            kernels.gather_map(self.channel.view(self.real), maps, flat, c == 0)
        self.image[self.u :] = 0
        self.image[:, self.v :] = 0
        return square, product

    def adjoint(self, out: Array) -> None:
        """A^H d into ``out`` of shape (u, v)."""
        self.image[...] = 0
        self.gradient()
        np.negative(self.image[: self.u, : self.v], out=out)

    def _image_copy(self) -> Array:
        if not hasattr(self, "_copy"):
            self._copy = np.empty_like(self.image)
        self._copy[...] = self.image
        return self._copy.view(self.real)

    def _residual(self, work: Array, channel: int) -> tuple[float, float]:
        """Image to A^H residual of one channel, in place."""
        done = fft_planes(work, overwrite=True, axes=self.axes)
        square, product = kernels.residual(
            done.view(self.real), self.data[channel].view(self.real), self.mask
        )
        back = ifft_planes(done, overwrite=True, axes=self.axes)
        if back is not work and not np.shares_memory(back, work):
            work[...] = back
        return square, product


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
) -> list[Any]:
    """Call ``solve(worker, encoding, data, i, plane)`` for every plane, over the threads.

    ``i`` is the plane's place in the block ``data``, ``plane`` in the stack; ``make`` builds one
    worker (its memory) per thread. Results come in plane order.
    """
    pool: SimpleQueue[Any] = SimpleQueue()
    for _ in range(min(threads(), acquisition.shape[0])):
        pool.put(make())
    results: list[Any] = []
    for planes, encoding, data in blocks(acquisition):

        def one(
            i: int, encoding: Encoding = encoding, data: Array = data, first: int = planes.start
        ) -> Any:
            worker = pool.get()
            try:
                return solve(worker, encoding, data, i, first + i)
            finally:
                pool.put(worker)

        results += map_blocks(one, range(data.shape[0]))
    return results
