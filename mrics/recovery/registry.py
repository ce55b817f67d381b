"""Which recoveries there are and where they live; their modules load when first used."""

from __future__ import annotations

from collections.abc import Callable
from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from mrics.encoding.acquisition import Acquisition
    from mrics.recovery.contract import Recovered
    from mrics.recovery.fields import Settings

#: name -> module of mrics.recovery holding ``solve(acquisition, settings, sigma) -> Recovered``
METHODS: dict[str, str] = {
    "dictionary": "dictionary.recovery",
    "homodyne": "partial_fourier",
    "pocs": "partial_fourier",
    "kernel": "kernel",
    "unfold": "unfold",
    "zero-filled": "zero_filled",
    "least-squares": "least_squares",
    "low-rank": "low_rank",
    "variation": "variation",
    "wavelet": "wavelet",
    "wavelet+variation": "combined",
}


def solver(method: str) -> Callable[[Acquisition, Settings, float], Recovered]:
    """The ``solve`` function of a method."""
    module = import_module(f"mrics.recovery.{METHODS[method]}")
    function: Callable[[Acquisition, Settings, float], Recovered] = module.solve
    return function
