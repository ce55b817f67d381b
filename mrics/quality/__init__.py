"""Quality: what a recovery cost, in numbers and maps."""

from __future__ import annotations

from importlib import import_module
from typing import Any

from mrics.quality.metrics import (
    METRICS,
    AcceptanceKey,
    Metric,
    acceptance_key,
    acceptance_keys,
)

_LAZY = {
    "ErrorMaps": "maps",
    "error_maps": "maps",
    "score": "scores",
    "score_planes": "scores",
}

__all__ = [
    "METRICS",
    "AcceptanceKey",
    "ErrorMaps",
    "Metric",
    "acceptance_key",
    "acceptance_keys",
    "error_maps",
    "score",
    "score_planes",
]


def __getattr__(name: str) -> Any:
    if name in _LAZY:
        return getattr(import_module(f"mrics.quality.{_LAZY[name]}"), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
