"""The encoding room: the forward model of the scan, its noise, and simulation of fewer lines."""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from mrics.encoding.acquisition import Acquisition as Acquisition
    from mrics.encoding.noise import estimate_sigma as estimate_sigma
    from mrics.encoding.operator import Encoding as Encoding
    from mrics.encoding.simulate import undersample as undersample
    from mrics.encoding.stream import blocks as blocks

_HOMES = {
    "Acquisition": "acquisition",
    "Encoding": "operator",
    "blocks": "stream",
    "estimate_sigma": "noise",
    "undersample": "simulate",
}

__all__ = ["Acquisition", "Encoding", "blocks", "estimate_sigma", "undersample"]


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        return getattr(import_module(f"mrics.encoding.{_HOMES[name]}"), name)
    raise AttributeError(f"module 'mrics.encoding' has no attribute {name!r}")
