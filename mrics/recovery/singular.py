"""Penalty halves of the splitting on singular values of frames: local low rank, low rank + sparse.

A block's matrix has one row per pixel and one column per frame; its singular values come from the
Gram matrix over frames in double precision, which is small.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.numerics import fft_planes, ifft_planes

Array = NDArray[Any]
#: threshold of the splitting relative to the RMS singular value of the first image's blocks, and
#: to the RMS of its temporal frequencies
_THRESHOLD, _SPARSE_THRESHOLD = 0.3, 1.0


class Tiles:
    """Blocks that cover a plane, each with its scale sqrt(pixels) + sqrt(frames)."""

    def __init__(self, shape: tuple[int, int], block: int, frames: int, offset: int = 0) -> None:
        self.offset = offset
        cuts = []
        for n in shape:
            side = min(block, n)
            whole = n // side * side
            cuts.append([(0, whole, side)] + ([(whole, n, n - whole)] if whole < n else []))
        self.regions = [(rows, columns) for rows in cuts[0] for columns in cuts[1]]
        self.scales = [float(np.sqrt(r[2] * c[2]) + np.sqrt(frames)) for r, c in self.regions]

    def blocks(self, values: Array) -> list[Array]:
        """Matrices (block, pixel, frame) of every region of (frame, u, v) values, copies."""
        moved = np.roll(values, (-self.offset, -self.offset), (1, 2)) if self.offset else values
        frames = len(moved)
        found = []
        for (r0, r1, high), (c0, c1, wide) in self.regions:
            part = moved[:, r0:r1, c0:c1].reshape(
                frames, (r1 - r0) // high, high, (c1 - c0) // wide, wide
            )
            found.append(part.transpose(1, 3, 2, 4, 0).reshape(-1, high * wide, frames))
        return found

    def assemble(self, matrices: list[Array], out: Array) -> None:
        """Inverse of :meth:`blocks`."""
        for ((r0, r1, high), (c0, c1, wide)), matrix in zip(self.regions, matrices, strict=True):
            shape = ((r1 - r0) // high, (c1 - c0) // wide, high, wide, len(out))
            part = matrix.reshape(shape).transpose(4, 0, 2, 1, 3)
            out[:, r0:r1, c0:c1] = part.reshape(len(out), r1 - r0, c1 - c0)
        if self.offset:
            out[...] = np.roll(out, (self.offset, self.offset), (1, 2))

    def shrink(self, values: Array, threshold: float) -> Array:
        """Singular values of every block less threshold * scale, at least 0."""
        shrunk = []
        for matrix, scale in zip(self.blocks(values), self.scales, strict=True):
            squares, vectors = np.linalg.eigh(_gram(matrix))
            size = np.sqrt(np.maximum(squares, 0))
            keep = np.maximum(0, 1 - threshold * scale / np.maximum(size, 1e-300))
            filters = (vectors * keep[:, None]) @ vectors.conj().swapaxes(1, 2)
            shrunk.append(matrix @ filters.astype(values.dtype))
        out = np.empty_like(values)
        self.assemble(shrunk, out)
        return out

    def norms(self, values: Array) -> tuple[float, float]:
        """Sum of scale * nuclear norm over blocks; largest of spectral norm / scale."""
        nuclear, largest = 0.0, 0.0
        for matrix, scale in zip(self.blocks(values), self.scales, strict=True):
            size = np.sqrt(np.maximum(np.linalg.eigvalsh(_gram(matrix)), 0))
            nuclear += scale * float(size.sum())
            largest = max(largest, float(size[:, -1].max()) / scale)
        return nuclear, largest

    def rms(self, values: Array) -> float:
        """Root mean square of the singular values / scale."""
        total, count = 0.0, 0
        for matrix, scale in zip(self.blocks(values), self.scales, strict=True):
            total += float(np.vdot(matrix, matrix).real) / scale**2
            count += len(matrix) * min(matrix.shape[1:])
        return float(np.sqrt(total / count))


def _gram(matrix: Array) -> Array:
    double = matrix.astype(np.complex128)
    return double.conj().swapaxes(1, 2) @ double


class LocalLowRank:
    """See :class:`places.JointPenalty`: mean over tilings, half a block apart."""

    def __init__(self, shape: tuple[int, int], real: Any, frames: int, block: int) -> None:
        self.padded, self.real = shape, np.dtype(real)
        self.tilings = [Tiles(shape, block, frames, offset) for offset in (0, block // 2)]
        if min(block, *shape) < 2 or block >= max(shape):
            self.tilings = self.tilings[:1]
        self.symbol = np.ones((1, 1), self.real)
        self.sums = np.zeros(6)

    def set_weight(self, weight: float, images: list[Array]) -> None:
        """See :class:`places.JointPenalty`."""
        stack = _stack(images)
        self.weight = weight / len(self.tilings)
        rms = max(tiles.rms(stack) for tiles in self.tilings)
        self.rho = self.weight / (_THRESHOLD * max(rms, 1e-30))
        self.symbol[...] = self.rho * len(self.tilings)
        self.states = [stack.copy() for _ in self.tilings]
        self._shrink()

    def pull(self, images: list[Array]) -> None:
        """See :class:`places.JointPenalty`."""
        total = sum(2 * z - v for z, v in zip(self.shrunk, self.states, strict=True))
        _unstack(self.real.type(self.rho) * total, images)

    def push(self, images: list[Array], relax: float) -> Array:
        """See :class:`places.JointPenalty`."""
        x = _stack(images)
        self.sums[:] = 0
        for tiles, v, z in zip(self.tilings, self.states, self.shrunk, strict=True):
            nuclear, _ = tiles.norms(x)
            _, dual = tiles.norms(x - 2 * z + v)
            self.sums[0] += self.weight * nuclear
            self.sums[1] = max(self.sums[1], self.rho * dual / self.weight)
            self.sums[4] += np.vdot(x - z, x - z).real
            self.sums[5] += np.vdot(x, x).real
            v += self.real.type(relax) * (x - z)
        self._shrink()
        return self.sums

    def _shrink(self) -> None:
        cut = self.weight / self.rho
        self.shrunk = [t.shrink(v, cut) for t, v in zip(self.tilings, self.states, strict=True)]


class LowRankSparse:
    """See :class:`places.JointPenalty`: images are a low-rank part plus a part with few temporal
    frequencies. Both parts' optimum for a given sum is in closed form, so the data half sees a
    number.
    """

    def __init__(self, shape: tuple[int, int], real: Any, frames: int, sparse: float) -> None:
        self.padded, self.real, self.sparse = shape, np.dtype(real), sparse
        self.tiles = Tiles(shape, max(shape), frames)
        self.symbol = np.ones((1, 1), self.real)
        self.sums = np.zeros(6)

    def set_weight(self, weight: float, images: list[Array]) -> None:
        """See :class:`places.JointPenalty`."""
        stack = _stack(images)
        self.weights = (weight, weight * self.sparse)
        spectrum = fft_planes(stack, axes=(0,))
        cuts = (
            _THRESHOLD * self.tiles.rms(stack),
            _SPARSE_THRESHOLD * float(np.sqrt(np.mean(np.abs(spectrum) ** 2))),
        )
        self.rhos = [w / max(cut, 1e-30) for w, cut in zip(self.weights, cuts, strict=True)]
        self.rho = 1 / (1 / self.rhos[0] + 1 / self.rhos[1])
        self.symbol[...] = self.rho
        self.states = [stack, np.zeros_like(stack)]
        self._shrink()

    def pull(self, images: list[Array]) -> None:
        """See :class:`places.JointPenalty`."""
        _unstack(self.real.type(self.rho) * (self.reflected[0] + self.reflected[1]), images)

    def push(self, images: list[Array], relax: float) -> Array:
        """See :class:`places.JointPenalty`."""
        x = _stack(images)
        rest = x - self.reflected[0] - self.reflected[1]
        shares = [self.real.type(self.rho / rho) for rho in self.rhos]
        self.parts = [h + a * rest for h, a in zip(self.reflected, shares, strict=True)]
        nuclear, _ = self.tiles.norms(self.parts[0])
        _, spectral = self.tiles.norms(rest)
        few = float(np.abs(fft_planes(self.parts[1], axes=(0,))).sum())
        peak = float(np.abs(fft_planes(rest, axes=(0,))).max())
        self.sums[:] = 0
        self.sums[0] = self.weights[0] * nuclear + self.weights[1] * few
        self.sums[1] = self.rho * max(spectral / self.weights[0], peak / self.weights[1])
        for v, z, part in zip(self.states, self.shrunk, self.parts, strict=True):
            self.sums[4] += np.vdot(part - z, part - z).real
            v += self.real.type(relax) * (part - z)
        self.sums[5] = np.vdot(x, x).real
        self._shrink()
        return self.sums

    def _shrink(self) -> None:
        low = self.tiles.shrink(self.states[0], self.weights[0] / self.rhos[0])
        spectrum = fft_planes(self.states[1], axes=(0,))
        size = np.abs(spectrum)
        cut = self.real.type(self.weights[1] / self.rhos[1])
        spectrum *= np.maximum(0, 1 - cut / np.maximum(size, self.real.type(1e-30)))
        self.shrunk = [low, ifft_planes(spectrum, axes=(0,))]
        self.reflected = [2 * z - v for z, v in zip(self.shrunk, self.states, strict=True)]


def _stack(images: list[Array]) -> Array:
    """Float views as (frame, u, v) complex."""
    kind = np.complex64 if images[0].dtype == np.float32 else np.complex128
    return np.stack([image.view(kind) for image in images])


def _unstack(stack: Array, images: list[Array]) -> None:
    for one, image in zip(stack, images, strict=True):
        image[...] = one.view(image.dtype)
