"""Recovery: from undersampled k-space to an image with a certificate.

A new method is one file here with ``solve(acquisition, settings, sigma) -> Recovered``, one
dataclass in ``settings`` and one entry in ``registry``.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from mrics.recovery.contract import Certificate as Certificate
    from mrics.recovery.contract import Recovered as Recovered
    from mrics.recovery.driver import recover as recover
    from mrics.recovery.driver import reference_sigma as reference_sigma
    from mrics.recovery.registry import METHODS as METHODS
    from mrics.recovery.settings import check_settings as check_settings
    from mrics.recovery.weights import frozen as frozen
    from mrics.recovery.weights import search_weight as search_weight

_HOMES = {
    "METHODS": "registry",
    "Certificate": "contract",
    "Recovered": "contract",
    "check_settings": "settings",
    "frozen": "weights",
    "recover": "driver",
    "reference_sigma": "driver",
    "search_weight": "weights",
}

__all__ = [
    "METHODS",
    "Certificate",
    "Recovered",
    "check_settings",
    "frozen",
    "recover",
    "reference_sigma",
    "search_weight",
]


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        return getattr(import_module(f"mrics.recovery.{_HOMES[name]}"), name)
    raise AttributeError(f"module 'mrics.recovery' has no attribute {name!r}")
