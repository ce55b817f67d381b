"""How many compute threads this process may use, and running a function over plane blocks."""

from __future__ import annotations

import os
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from contextlib import AbstractContextManager
from functools import lru_cache
from typing import Any

from threadpoolctl import ThreadpoolController

_threads = max(1, len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else 1)


def threads() -> int:
    """Number of compute threads this process uses (default: the cores it may run on)."""
    return _threads


def set_threads(count: int) -> None:
    """Set the number of compute threads; a study's worker process uses one."""
    global _threads
    if count < 1:
        raise ValueError(f"thread count must be at least 1, got {count}")
    _threads = int(count)


@lru_cache(maxsize=1)
def _libraries() -> ThreadpoolController:
    # Finding them takes a millisecond; scipy brings one of its own, found only once it is loaded.
    import scipy.linalg  # noqa: F401

    return ThreadpoolController()


def one_blas_thread() -> AbstractContextManager[Any]:
    """Context in which linear algebra runs on one thread."""
    limit: AbstractContextManager[Any] = _libraries().limit(limits=1, user_api="blas")
    return limit


def map_blocks(function: Callable[[Any], Any], blocks: Iterable[Any]) -> list[Any]:
    """Run ``function`` on every block, over the compute threads, results in the order given.

    The function must spend its time outside the interpreter lock (FFTs, compiled kernels). Linear
    algebra runs on one thread meanwhile: the blocks are what is spread over the cores.
    """
    items = list(blocks)
    count = min(_threads, len(items))
    with one_blas_thread():
        if count <= 1:
            return [function(item) for item in items]
        with ThreadPoolExecutor(count) as pool:
            return list(pool.map(function, items))


def stream_blocks(function: Callable[[Any], Any], blocks: Iterable[Any]) -> Iterator[Any]:
    """:func:`map_blocks` that hands results on while others are computed; few are held."""
    waiting: deque[Future[Any]] = deque()
    with one_blas_thread(), ThreadPoolExecutor(_threads) as pool:
        for item in blocks:
            waiting.append(pool.submit(function, item))
            if len(waiting) > 2 * _threads:
                yield waiting.popleft().result()
        while waiting:
            yield waiting.popleft().result()
