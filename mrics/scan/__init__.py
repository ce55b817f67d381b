"""The scan room: NIfTI files in and out, body mask, noise level, fitness as a reference."""

from __future__ import annotations

from importlib import import_module
from typing import Any

from mrics.scan.volume import Axes, Scan

_LAZY = {
    "Finding": "mrics.scan.fitness",
    "Header": "mrics.scan.header",
    "Noise": "mrics.scan.noise",
    "body_mask": "mrics.scan.mask",
    "inspect_scan": "mrics.scan.fitness",
    "read_header": "mrics.scan.header",
    "read_scan": "mrics.scan.read",
    "scan_noise": "mrics.scan.noise",
    "scan_sigma": "mrics.scan.noise",
    "write_nifti": "mrics.scan.write",
}

__all__ = [
    "Axes",
    "Finding",
    "Header",
    "Noise",
    "Scan",
    "body_mask",
    "inspect_scan",
    "read_header",
    "read_scan",
    "scan_noise",
    "scan_sigma",
    "write_nifti",
]


def __getattr__(name: str) -> Any:
    if name in _LAZY:
        return getattr(import_module(_LAZY[name]), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
