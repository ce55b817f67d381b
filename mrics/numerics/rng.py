"""Random streams that depend on a seed and an identity, never on the order of execution."""

from __future__ import annotations

import hashlib

import numpy as np
from numpy.typing import NDArray


def stream(seed: int, *identity: object) -> np.random.Generator:
    """A PCG64 generator for one unit of work.

    Parameters
    ----------
    seed : int
        Non-negative study seed.
    *identity : object
        What the stream is for (strings and numbers, for example ``"noise", scan_hash, draw``);
        the text of each takes part, so that the same identity gives the same stream anywhere.
    """
    digest = hashlib.sha256("\x1f".join(str(part) for part in identity).encode()).digest()
    words = np.frombuffer(digest, dtype="<u4").tolist() if identity else []
    return np.random.Generator(np.random.PCG64(np.random.SeedSequence([int(seed), *words])))


def uniforms(generator: np.random.Generator, count: int) -> NDArray[np.float64]:
    """``count`` uniforms in [0, 1) from the raw 64-bit stream, equal on every machine."""
    raw = np.asarray(generator.bit_generator.random_raw(count), dtype=np.uint64)
    return (raw >> np.uint64(11)).astype(np.float64) * 2.0**-53
