"""The protocol room: what a person writes, checked, and what it costs in scan time."""

from __future__ import annotations

from importlib import import_module
from typing import Any

_HOME = {
    "Arm": "arms",
    "Protocol": "document",
    "ScanFiles": "files",
    "from_text": "document",
    "load_protocol": "document",
    "new_protocol": "template",
}

__all__ = [
    "Arm",
    "Protocol",
    "ScanFiles",
    "from_text",
    "load_protocol",
    "new_protocol",
]


def __getattr__(name: str) -> Any:
    if name in _HOME:
        return getattr(import_module(f"{__name__}.{_HOME[name]}"), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
