"""Random draws that realise inclusion probabilities.

Each takes probabilities in units of 2^-30 and a generator, and uses only whole-number arithmetic
on its raw 64-bit stream.
"""

from __future__ import annotations

import numpy as np

from mrics.sampling.grid import Mask
from mrics.sampling.probability import BITS, ONE, Quanta


def bernoulli(quanta: Quanta, generator: np.random.Generator) -> Mask:
    """Every position on its own with its probability; the count varies from draw to draw."""
    raw = _raw(generator, quanta.size)
    return np.asarray((raw >> np.uint64(64 - BITS)).astype(np.int64) < quanta.ravel()).reshape(
        quanta.shape
    )


def exact_count(quanta: Quanta, generator: np.random.Generator) -> Mask:
    """Exactly sum(p) positions, every one with exactly its probability.

    Systematic sampling in random order: the probabilities, shuffled, are laid end to end on a line
    and every point u + 1, u + 2, ... of a comb with a random start falls on one position. A length
    p is hit with probability p whatever the order; the shuffle, new in every draw, removes any
    other structure (Hartley & Rao 1962, Ann Math Stat 33:350-374).
    """
    order = shuffle(quanta.size, generator)
    start = int(_raw(generator, 1)[0] >> np.uint64(64 - BITS))
    ends = np.cumsum(quanta.ravel()[order])
    hits = (ends + start) // ONE
    taken = np.diff(hits, prepend=start // ONE) > 0
    mask = np.zeros(quanta.size, dtype=bool)
    mask[order[taken]] = True
    return mask.reshape(quanta.shape)


def shuffle(count: int, generator: np.random.Generator) -> np.ndarray:
    """A random order of ``count`` things, equal on every machine."""
    return np.argsort(_raw(generator, count), kind="stable")


def _raw(generator: np.random.Generator, count: int) -> np.ndarray:
    return np.asarray(generator.bit_generator.random_raw(count), dtype=np.uint64)
