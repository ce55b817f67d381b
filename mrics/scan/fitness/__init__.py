"""Is this scan fit to be a reference? Findings about what was done to it."""

from __future__ import annotations

from importlib import import_module
from typing import Any

_LAZY = {
    "CHECKS": "mrics.scan.fitness.inspect",
    "Finding": "mrics.scan.fitness.finding",
    "Inspection": "mrics.scan.fitness.inspect",
    "inspect_fully": "mrics.scan.fitness.inspect",
    "inspect_scan": "mrics.scan.fitness.inspect",
}

__all__ = ["CHECKS", "Finding", "Inspection", "inspect_fully", "inspect_scan"]


def __getattr__(name: str) -> Any:
    if name in _LAZY:
        return getattr(import_module(_LAZY[name]), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
