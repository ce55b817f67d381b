"""Draws that spread positions evenly: jittered cells, and a low-discrepancy sequence."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from mrics.numerics import uniforms
from mrics.sampling.draws import exact_count
from mrics.sampling.grid import Mask
from mrics.sampling.probability import ONE, Quanta, inclusion

Words = NDArray[np.uint32]


def jittered(quanta: Quanta, generator: np.random.Generator) -> Mask:
    """One position in each cell of expected count one; every position with exactly its p.

    The grid is walked line by line in 1-D, along a Hilbert curve in 2-D (turned at random), and
    cut into cells where the summed probability passes a whole number. Which position of a cell is
    taken, and that one on a border is never taken twice, is ordered pivotal sampling
    (Chauvet 2012, Scand J Stat 39:632-650).
    """
    from mrics.sampling._walk_kernels import pivotal

    flat = quanta.ravel()
    walk = curve(quanta.shape, generator)
    walk = walk[(flat[walk] > 0) & (flat[walk] < ONE)]
    taken = flat == ONE
    chosen = pivotal(flat[walk], uniforms(generator, walk.size))
    taken[walk[chosen]] = True
    return taken.reshape(quanta.shape)


def low_discrepancy(quanta: Quanta, generator: np.random.Generator) -> Mask:
    """Scrambled Sobol points mapped through the law; exactly sum(p) positions.

    The first coordinate picks the phase line, the second the position in it. A point that falls
    on a position already taken is made up for by a draw over the free positions with weights
    p^2/(1 - p), where such falls are most likely, so that the density stays close to the law.
    """
    flat = np.where(quanta < ONE, quanta, 0)
    taken = (quanta == ONE).ravel()
    count = int(flat.sum() // ONE)
    if count == 0:
        return taken.reshape(quanta.shape)
    x, y = (words * 2.0**-32 for words in scrambled_sobol(count, generator))
    ends = np.cumsum(flat.ravel())
    if quanta.ndim == 1:
        places = np.searchsorted(ends, x * ends[-1], side="right")
    else:
        line_ends = ends[quanta.shape[1] - 1 :: quanta.shape[1]]
        line = np.searchsorted(line_ends, x * line_ends[-1], side="right")
        starts = np.concatenate([[0], line_ends])[line]
        places = np.searchsorted(ends, starts + y * (line_ends[line] - starts), side="right")
    taken[places] = True
    missing = int(quanta.sum() // ONE) - int(taken.sum())
    if missing:
        p = flat.ravel() / ONE
        again = inclusion(np.where(taken, 0.0, p**2 / (1 - p)), missing)
        taken |= exact_count(again, generator)
    return taken.reshape(quanta.shape)


def scrambled_sobol(count: int, generator: np.random.Generator) -> tuple[Words, Words]:
    """First ``count`` points of the 2-D Sobol sequence, nested-scrambled, as 32-bit words.

    Scrambling by hashing follows Burley 2020 (J Comput Graph Tech 9(4):1-20).
    """
    seeds = np.asarray(generator.bit_generator.random_raw(2), dtype=np.uint64) >> np.uint64(32)
    points = sobol(np.arange(count, dtype=np.uint32))
    first, second = (
        _scramble(axis, np.uint32(seed)) for axis, seed in zip(points, seeds, strict=True)
    )
    return first, second


def sobol(index: Words) -> tuple[Words, Words]:
    """Point number ``index`` of the 2-D Sobol sequence (natural order), as 32-bit words."""
    second = np.zeros_like(index)
    direction = 1 << 31
    for bit in range(32):
        odd = (index >> np.uint32(bit)) & np.uint32(1)
        second ^= odd * np.uint32(direction)
        direction ^= direction >> 1
    return _reverse_bits(index), second


def _reverse_bits(words: Words) -> Words:
    out = words.copy()
    for shift, mask in ((1, 0x55555555), (2, 0x33333333), (4, 0x0F0F0F0F), (8, 0x00FF00FF)):
        low = np.uint32(mask)
        out = ((out >> np.uint32(shift)) & low) | ((out & low) << np.uint32(shift))
    return (out >> np.uint32(16)) | (out << np.uint32(16))


def _scramble(words: Words, seed: np.uint32) -> Words:
    out = _reverse_bits(words) + np.full_like(words, seed)
    for factor in (0x6C50B47C, 0xB82F1E52, 0xC7AFE638, 0x8D22F6E6):
        out ^= out * np.uint32(factor)
    return _reverse_bits(out)


def curve(shape: tuple[int, ...], generator: np.random.Generator) -> NDArray[np.int64]:
    """Flat positions in the order of the walk, from a random place on it, once around."""
    word = int(generator.bit_generator.random_raw())
    size = int(np.prod(shape))
    if len(shape) == 1:
        order = np.arange(size)
    else:
        u, v = np.indices(shape)
        if word & 1:
            u = shape[0] - 1 - u
        if word & 2:
            v = shape[1] - 1 - v
        order = np.argsort(hilbert_index(u.ravel(), v.ravel(), max(shape)), kind="stable")
    return np.roll(order, (word >> 2) % size)


def hilbert_index(u: NDArray[np.int64], v: NDArray[np.int64], size: int) -> NDArray[np.int64]:
    """Place of (u, v) on the Hilbert curve of the smallest power-of-two square of ``size``."""
    u, v = u.astype(np.int64), v.astype(np.int64)
    index = np.zeros_like(u)
    side = 1 << max(1, int(size - 1).bit_length())
    half = side // 2
    while half:
        right, up = ((u & half) > 0).astype(np.int64), ((v & half) > 0).astype(np.int64)
        index += half * half * ((3 * right) ^ up)
        flip = (up == 0) & (right == 1)
        u, v = np.where(flip, side - 1 - u, u), np.where(flip, side - 1 - v, v)
        u, v = np.where(up == 0, v, u), np.where(up == 0, u, v)
        half //= 2
    return index
