"""Shared kernels: Fourier transform, threads, random streams."""

from mrics.numerics.fourier import (
    centred_fft,
    centred_ifft,
    circular_correlation,
    fft_planes,
    ifft_planes,
    recentre,
    uncentre,
)
from mrics.numerics.rng import stream, uniforms
from mrics.numerics.threads import (
    map_blocks,
    one_blas_thread,
    set_threads,
    stream_blocks,
    threads,
)

__all__ = [
    "centred_fft",
    "centred_ifft",
    "circular_correlation",
    "fft_planes",
    "ifft_planes",
    "map_blocks",
    "one_blas_thread",
    "recentre",
    "set_threads",
    "stream",
    "stream_blocks",
    "threads",
    "uncentre",
    "uniforms",
]
