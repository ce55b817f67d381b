"""The protocol room: what a person writes, checked, and what it costs in scan time."""

from __future__ import annotations

from importlib import import_module
from typing import Any

_HOME = {
    "Arm": "arms",
    "Limit": "acceptance",
    "Protocol": "document",
    "ScanFiles": "files",
    "Timing": "timing",
    "console_difference": "timing",
    "decay_finding": "play",
    "from_text": "document",
    "limit_findings": "play",
    "load_protocol": "document",
    "minutes": "timing",
    "new_protocol": "template",
    "play_pattern": "play",
    "scan_time": "arm_time",
    "sequence_time": "timing",
    "snr_index": "timing",
}

__all__ = [
    "Arm",
    "Limit",
    "Protocol",
    "ScanFiles",
    "Timing",
    "console_difference",
    "decay_finding",
    "from_text",
    "limit_findings",
    "load_protocol",
    "minutes",
    "new_protocol",
    "play_pattern",
    "scan_time",
    "sequence_time",
    "snr_index",
]


def __getattr__(name: str) -> Any:
    if name in _HOME:
        return getattr(import_module(f"{__name__}.{_HOME[name]}"), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
