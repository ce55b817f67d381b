"""The linear forward model of one block of planes: sensitivities, Fourier transform, pattern.

For plane p and channel c, with F the orthonormal un-centred transform of
:mod:`mrics.numerics.fourier` and M the pattern,

    (A x)_pc = M_p F (S_pc x_p)          A^H y = sum_c conj(S_pc) F^H M_p y_pc

so A^H A has no eigenvalue above the largest sum over channels of |S|^2 (1 without sensitivities).
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import AcquisitionError
from mrics.numerics import fft_planes, ifft_planes

Array = NDArray[Any]
_AXES = ("plane", "channel", "u", "v")


class Encoding:
    """Forward model of a block of planes that share nothing but their grid.

    Images are in natural order, k-space is un-centred (zero frequency at index 0): no method
    shifts. All methods are serial and hold no state but workspace, so that threads work on
    :meth:`part` of the block each.

    Parameters
    ----------
    mask : ndarray of bool, shape (planes or 1, 1, u, v or 1)
        Acquired samples, un-centred; length 1 along v means that the readout is full.
    shape : tuple of int
        (planes, u, v) of the image block.
    dtype : complex64 or complex128
        Type of images and k-space.
    sensitivities : ndarray of shape (planes or 1, channels, u, v), optional
        Receive sensitivities, natural order, whitened if the data are; one uniform channel if
        left out.

    Attributes
    ----------
    mask, sensitivities
        As given (sensitivities in ``dtype``), for solvers that fuse their own loops.
    weights : ndarray, shape of ``mask``
        The mask in ``dtype``, ready to multiply k-space in place.
    in_shape, out_shape : tuple of int
        (planes, u, v) and (planes, channels, u, v).
    dtype : numpy.dtype
        Complex type of both sides.
    """

    def __init__(
        self,
        mask: NDArray[np.bool_],
        shape: tuple[int, int, int],
        dtype: Any = np.complex64,
        sensitivities: Array | None = None,
    ) -> None:
        planes, u, v = (int(n) for n in shape)
        self.dtype = np.dtype(dtype)
        if self.dtype not in (np.dtype(np.complex64), np.dtype(np.complex128)):
            raise AcquisitionError(
                f"Encoding works in complex64 or complex128, got {self.dtype}.",
                "dtype",
                "Convert the data first.",
            )
        if (
            mask.ndim != 4
            or mask.shape[0] not in (1, planes)
            or mask.shape[1] != 1
            or mask.shape[2] != u
            or mask.shape[3] not in (1, v)
        ):
            raise AcquisitionError(
                f"Mask of shape {mask.shape} does not fit planes of shape {(planes, u, v)}.",
                "mask, axes (plane, channel, u, v)",
                f"Give a mask of shape ({planes} or 1, 1, {u}, {v} or 1).",
            )
        if sensitivities is not None and (
            sensitivities.ndim != 4
            or sensitivities.shape[0] not in (1, planes)
            or sensitivities.shape[2:] != (u, v)
        ):
            raise AcquisitionError(
                f"Sensitivities of shape {sensitivities.shape} are of another grid than the "
                f"planes of shape {(planes, u, v)}.",
                "sensitivities, axes (plane, channel, u, v)",
                f"Give sensitivities of shape ({planes} or 1, channels, {u}, {v}).",
            )
        self.mask = mask
        self.weights = np.ascontiguousarray(mask, dtype=self.dtype)
        self.sensitivities = (
            None if sensitivities is None else np.ascontiguousarray(sensitivities, dtype=self.dtype)
        )
        channels = 1 if sensitivities is None else int(sensitivities.shape[1])
        self.in_shape = (planes, u, v)
        self.out_shape = (planes, channels, u, v)
        # A full readout commutes with the pattern: the normal operator transforms u alone.
        self._normal_axes = (-2,) if mask.shape[3] == 1 else (-2, -1)
        self._work: Array | None = None

    @property
    def channels(self) -> int:
        """Number of channels."""
        return self.out_shape[1]

    @property
    def bound(self) -> float:
        """Upper bound on the eigenvalues of A^H A: the largest sum over channels of |S|^2."""
        if self.sensitivities is None:
            return 1.0
        return float(self.energy.max())

    @property
    def energy(self) -> Array:
        """Sum over channels of |S|^2, real, shape (planes or 1, u, v); ones for one channel."""
        real = np.dtype(self.dtype.type(0).real.dtype)
        if self.sensitivities is None:
            return np.ones((1, *self.in_shape[1:]), dtype=real)
        total = np.zeros((self.sensitivities.shape[0], *self.in_shape[1:]), dtype=real)
        for channel in range(self.channels):
            one = self.sensitivities[:, channel]
            total += one.real**2 + one.imag**2
        return total

    def part(self, planes: slice) -> Encoding:
        """The operator of some planes of the block; arrays are shared, workspace is not."""
        start, stop, step = planes.indices(self.in_shape[0])
        count = len(range(start, stop, step))
        one = object.__new__(Encoding)
        one.dtype = self.dtype
        one.mask = self.mask if self.mask.shape[0] == 1 else self.mask[planes]
        one.weights = self.weights if self.weights.shape[0] == 1 else self.weights[planes]
        maps = self.sensitivities
        one.sensitivities = maps if maps is None or maps.shape[0] == 1 else maps[planes]
        one.in_shape = (count, *self.in_shape[1:])
        one.out_shape = (count, *self.out_shape[1:])
        one._normal_axes = self._normal_axes
        one._work = None
        return one

    def forward(self, image: Array, out: Array | None = None) -> Array:
        """Un-centred k-space of an image block.

        Parameters
        ----------
        image : ndarray of shape ``in_shape``
            Natural order; not modified.
        out : ndarray of shape ``out_shape``, C-contiguous, optional
            Filled in place, so that a loop allocates nothing.

        Returns
        -------
        ndarray of shape ``out_shape``
            Zero where nothing is acquired.
        """
        self._check(image, self.in_shape, "image", ("plane", "u", "v"))
        if out is None:
            out = np.empty(self.out_shape, dtype=self.dtype)
        else:
            self._check(out, self.out_shape, "out", _AXES)
        if self.sensitivities is None:
            out[:, 0] = image
        else:
            np.multiply(image[:, None], self.sensitivities, out=out)
        out = fft_planes(out, overwrite=True)
        out *= self.weights
        return out

    def adjoint(self, kspace: Array, out: Array | None = None, *, overwrite: bool = False) -> Array:
        """Adjoint of :meth:`forward`: channels combined by conjugate sensitivities.

        Parameters
        ----------
        kspace : ndarray of shape ``out_shape``
            Un-centred; what lies outside the pattern is ignored.
        out : ndarray of shape ``in_shape``, optional
            Filled in place.
        overwrite : bool
            Use ``kspace`` as workspace (it is destroyed).

        Returns
        -------
        ndarray of shape ``in_shape``
        """
        self._check(kspace, self.out_shape, "kspace", _AXES)
        if out is None:
            out = np.empty(self.in_shape, dtype=self.dtype)
        else:
            self._check(out, self.in_shape, "out", ("plane", "u", "v"))
        work = np.multiply(kspace, self.weights, out=kspace if overwrite else None)
        work = ifft_planes(work, overwrite=True)
        if self.sensitivities is None:
            out[...] = work[:, 0]
        else:
            from mrics.encoding._kernels import combine

            combine(work, self.sensitivities, out)
        return out

    def normal(self, image: Array, out: Array | None = None) -> Array:
        """A^H A of an image block, plane by plane so that one plane stays in cache.

        Where the readout is full only axis u is transformed, which is exact: the transform along
        v cancels.

        Parameters
        ----------
        image : ndarray of shape ``in_shape``
            Not modified.
        out : ndarray of shape ``in_shape``, C-contiguous, not ``image``, optional
            Filled in place; nothing else is allocated after the first call.

        Returns
        -------
        ndarray of shape ``in_shape``
        """
        self._check(image, self.in_shape, "image", ("plane", "u", "v"))
        if out is None:
            out = np.empty(self.in_shape, dtype=self.dtype)
        else:
            self._check(out, self.in_shape, "out", ("plane", "u", "v"))
        maps = self.sensitivities
        if maps is not None:
            from mrics.encoding._kernels import combine_one

            if self._work is None:
                self._work = np.empty(self.out_shape[1:], dtype=self.dtype)
        for plane in range(self.in_shape[0]):
            weights = self.weights[plane if self.weights.shape[0] > 1 else 0, 0]
            if maps is None:
                work = out[plane]
                work[...] = image[plane]
            else:
                assert self._work is not None
                work = self._work
                one = maps[plane if maps.shape[0] > 1 else 0]
                np.multiply(image[plane], one, out=work)
            work = fft_planes(work, overwrite=True, axes=self._normal_axes)
            work *= weights
            work = ifft_planes(work, overwrite=True, axes=self._normal_axes)
            if maps is not None:
                combine_one(work, one, out[plane])
        return out

    def _check(
        self, array: Array, shape: tuple[int, ...], name: str, axes: tuple[str, ...]
    ) -> None:
        if array.shape != shape or array.dtype != self.dtype:
            raise AcquisitionError(
                f"{name} has shape {array.shape} and type {array.dtype}; the operator needs "
                f"{shape} and {self.dtype}.",
                f"{name}, axes ({', '.join(axes)})",
                "Reshape or convert it first.",
            )
