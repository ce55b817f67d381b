"""Which phase-encode positions are acquired: laws, draws, regular patterns."""

from __future__ import annotations

from typing import Any

from mrics.sampling.pattern import Pattern

__all__ = ["DRAWS", "LAWS", "PATTERNS", "Pattern", "check_sampling", "draw_entry", "draw_pattern"]

_LAZY = {
    "DRAWS": "vocabulary",
    "LAWS": "laws",
    "PATTERNS": "vocabulary",
    "check_sampling": "vocabulary",
    "draw_entry": "draw",
    "draw_pattern": "draw",
}


def __getattr__(name: str) -> Any:
    if name in _LAZY:
        from importlib import import_module

        return getattr(import_module(f"mrics.sampling.{_LAZY[name]}"), name)
    raise AttributeError(f"module 'mrics.sampling' has no attribute {name!r}")
