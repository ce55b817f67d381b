"""Invented objects with closed-form or finely sampled k-space, and the sample data made of them."""

from __future__ import annotations

from importlib import import_module
from typing import Any

_HOMES = {
    "Ellipse": "ellipses",
    "Ellipsoid": "ellipses",
    "Gaussian": "ellipses",
    "WaveMaps": "channels",
    "channel_kspace": "channels",
    "closed_form_kspace": "ellipses",
    "fit_waves": "channels",
    "knee_kspace": "sample",
    "make_sample_data": "sample",
    "shepp_logan": "ellipses",
}

__all__ = [
    "Ellipse",
    "Ellipsoid",
    "Gaussian",
    "WaveMaps",
    "channel_kspace",
    "closed_form_kspace",
    "fit_waves",
    "knee_kspace",
    "make_sample_data",
    "shepp_logan",
]


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        return getattr(import_module(f"mrics.phantom.{_HOMES[name]}"), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
