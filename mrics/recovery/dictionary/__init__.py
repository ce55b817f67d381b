"""Patch dictionaries: learned, fixed, coded, stored, checked against a scan, used for recovery."""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from mrics.recovery.dictionary.coding import Codes as Codes
    from mrics.recovery.dictionary.coding import code as code
    from mrics.recovery.dictionary.domain import DomainCheck as DomainCheck
    from mrics.recovery.dictionary.domain import check_domain as check_domain
    from mrics.recovery.dictionary.fixed import fixed_atoms as fixed_atoms
    from mrics.recovery.dictionary.learning import learn_ksvd as learn_ksvd
    from mrics.recovery.dictionary.learning import learn_online as learn_online
    from mrics.recovery.dictionary.ridge import recover_ridge as recover_ridge
    from mrics.recovery.dictionary.store import Dictionary as Dictionary
    from mrics.recovery.dictionary.store import load_dictionary as load_dictionary
    from mrics.recovery.dictionary.store import save_dictionary as save_dictionary

_HOMES = {
    "Codes": "coding",
    "Dictionary": "store",
    "DomainCheck": "domain",
    "check_domain": "domain",
    "code": "coding",
    "fixed_atoms": "fixed",
    "learn_ksvd": "learning",
    "learn_online": "learning",
    "load_dictionary": "store",
    "recover_ridge": "ridge",
    "save_dictionary": "store",
}

__all__ = [
    "Codes",
    "Dictionary",
    "DomainCheck",
    "check_domain",
    "code",
    "fixed_atoms",
    "learn_ksvd",
    "learn_online",
    "load_dictionary",
    "recover_ridge",
    "save_dictionary",
]


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        return getattr(import_module(f"mrics.recovery.dictionary.{_HOMES[name]}"), name)
    raise AttributeError(f"module 'mrics.recovery.dictionary' has no attribute {name!r}")
