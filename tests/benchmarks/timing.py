"""Timing that the benchmarks share."""

import time
from collections.abc import Callable


def fastest(function: Callable[[], object], repeats: int = 5) -> float:
    """Shortest of several calls, in seconds."""
    best = float("inf")
    for _ in range(repeats):
        start = time.perf_counter()
        function()
        best = min(best, time.perf_counter() - start)
    return best
