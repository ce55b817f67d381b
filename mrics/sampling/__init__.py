"""Which phase-encode positions are acquired: laws, draws, regular patterns, spread, tables."""

from __future__ import annotations

from importlib import import_module
from typing import Any

from mrics.sampling.pattern import Pattern

_LAZY = {
    "DRAWS": "vocabulary",
    "DecaySpread": "decay",
    "LAWS": "laws",
    "Ordered": "ordered",
    "PATTERNS": "vocabulary",
    "RadialProfile": "profile",
    "Spread": "spread_of_point",
    "TransformSpread": "spread_of_wavelets",
    "check_sampling": "vocabulary",
    "decay_spread": "decay",
    "draw_entry": "draw",
    "draw_pattern": "draw",
    "entry_keys": "vocabulary",
    "law_quanta": "table",
    "order_pattern": "order",
    "radial_profile": "profile",
    "read_pattern": "table",
    "redraw": "draw",
    "spread": "spread_of_point",
    "training_energy": "source",
    "transform_spread": "spread_of_wavelets",
    "write_table": "table",
}

__all__ = [
    "DRAWS",
    "LAWS",
    "PATTERNS",
    "DecaySpread",
    "Ordered",
    "Pattern",
    "RadialProfile",
    "Spread",
    "TransformSpread",
    "check_sampling",
    "decay_spread",
    "draw_entry",
    "draw_pattern",
    "entry_keys",
    "law_quanta",
    "order_pattern",
    "radial_profile",
    "read_pattern",
    "redraw",
    "spread",
    "training_energy",
    "transform_spread",
    "write_table",
]


def __getattr__(name: str) -> Any:
    if name in _LAZY:
        return getattr(import_module(f"mrics.sampling.{_LAZY[name]}"), name)
    raise AttributeError(f"module 'mrics.sampling' has no attribute {name!r}")
