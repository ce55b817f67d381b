"""The scan room: NIfTI files in and out, body mask, noise level, fitness as a reference."""

from __future__ import annotations

from importlib import import_module
from typing import Any

from mrics.scan.volume import Axes, Scan

_LAZY = {
    "Finding": "mrics.scan.fitness",
    "Header": "mrics.scan.header",
    "Inspection": "mrics.scan.fitness",
    "Noise": "mrics.scan.noise",
    "acquired_region": "mrics.scan.remedies",
    "add_noise": "mrics.scan.remedies",
    "add_phase": "mrics.scan.remedies",
    "body_mask": "mrics.scan.mask",
    "crop_kspace": "mrics.scan.remedies",
    "inspect_fully": "mrics.scan.fitness",
    "inspect_scan": "mrics.scan.fitness",
    "noise_estimates": "mrics.scan.noise",
    "read_header": "mrics.scan.header",
    "read_labels": "mrics.scan.labels",
    "read_scan": "mrics.scan.read",
    "remedied": "mrics.scan.remedies",
    "scan_noise": "mrics.scan.noise",
    "scan_sigma": "mrics.scan.noise",
    "write_nifti": "mrics.scan.write",
}

__all__ = [
    "Axes",
    "Finding",
    "Header",
    "Inspection",
    "Noise",
    "Scan",
    "acquired_region",
    "add_noise",
    "add_phase",
    "body_mask",
    "crop_kspace",
    "inspect_fully",
    "inspect_scan",
    "noise_estimates",
    "read_header",
    "read_labels",
    "read_scan",
    "remedied",
    "scan_noise",
    "scan_sigma",
    "write_nifti",
]


def __getattr__(name: str) -> Any:
    if name in _LAZY:
        return getattr(import_module(_LAZY[name]), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
