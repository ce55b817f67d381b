"""Keys of one sampling entry: a ``[[sampling]]`` table, ``[today]``, or ``draw_pattern``'s words.

A random pattern names its ``law`` and ``draw``; a regular one names its ``pattern``. Which further
keys an entry takes follows from those names; any other key is an error.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from mrics.errors import PatternError
from mrics.sampling.laws import LAWS, law_parameters

DRAWS: dict[str, tuple[str, ...]] = {
    "exact-count": (),
    "bernoulli": (),
}
PATTERNS: dict[str, tuple[str, ...]] = {
    "random": ("law", "draw", "per_axis"),
    "full": (),
    "equispaced": ("steps",),
}
COMMON = (
    "name",
    "pattern",
    "sampling",
    "acceleration",
    "calibration",
    "elliptical",
    "partial_fourier",
)


@dataclass(frozen=True)
class Entry:
    """One sampling entry with defaults filled in, checked as far as possible without a grid.

    Attributes
    ----------
    pattern : str
        Key of :data:`PATTERNS`; "random" for a law with a draw.
    law, draw : str
        Keys of ``LAWS`` and :data:`DRAWS`; empty for regular patterns.
    law_settings : dict
        The law's parameters.
    accelerations : tuple of float
        Requested R, each at least 1; empty where the entry leaves it to its steps.
    calibration, partial_fourier : int, float or sequence
        As written, checked against the grid when it is drawn.
    elliptical, per_axis : bool
        Shutter; law per axis.
    options : dict
        Further keys of the pattern or draw, as written.
    name : str
        Label.
    """

    pattern: str = "random"
    law: str = ""
    draw: str = ""
    law_settings: dict[str, Any] = field(default_factory=dict)
    accelerations: tuple[float, ...] = ()
    calibration: Any = 0
    partial_fourier: Any = 1.0
    elliptical: bool = False
    per_axis: bool = False
    options: dict[str, Any] = field(default_factory=dict)
    name: str = ""


def entry_keys(pattern: str, law: str = "", draw: str = "") -> tuple[str, ...]:
    """Every key an entry of this pattern, law and draw may hold, sorted."""
    keys = {*COMMON, *PATTERNS[pattern]}
    if pattern == "random":
        keys |= {*LAWS[law].parameters, *DRAWS[draw]}
    return tuple(sorted(keys))


def check_sampling(entry: dict[str, Any]) -> None:
    """Check the keys and values of one sampling entry, without a grid.

    Raises
    ------
    PatternError
        For an unknown pattern, law, draw or key (the nearest is named), or a value out of range.
    """
    parse_entry(entry)


def parse_entry(entry: dict[str, Any]) -> Entry:
    """The entry with defaults filled in; raises as :func:`check_sampling` does."""
    pattern = entry.get("pattern", entry.get("sampling"))
    if pattern is None:
        pattern = "random"
    _known(pattern, PATTERNS, "pattern")
    law = draw = ""
    if pattern == "random":
        law = _known(entry.get("law", "power"), LAWS, "law")
        draw = _known(entry.get("draw", "exact-count"), DRAWS, "draw")
    _check_keys(entry, pattern, law, draw)
    flags = {}
    for key in ("elliptical", "per_axis"):
        flags[key] = _flag(entry, key)
    used = {*COMMON, "law", "draw", "per_axis"}
    parameters = LAWS[law].parameters if law else {}
    return Entry(
        pattern=pattern,
        law=law,
        draw=draw,
        law_settings=law_parameters(law, entry) if law else {},
        accelerations=_accelerations(entry.get("acceleration")),
        calibration=entry.get("calibration", 0),
        partial_fourier=entry.get("partial_fourier", 1.0),
        options={k: v for k, v in entry.items() if k not in used and k not in parameters},
        name=str(entry.get("name", "")),
        **flags,
    )


def _known(name: Any, table: Iterable[str], key: str) -> str:
    names = sorted(table)
    if name in names:
        return str(name)
    raise PatternError(
        f"The {key} {name!r} is not known.{_nearest(str(name), names)}",
        key,
        f"Use one of {', '.join(names)}.",
    )


def _check_keys(entry: dict[str, Any], pattern: str, law: str, draw: str) -> None:
    keys = entry_keys(pattern, law, draw)
    subject = f"the law {law!r} with the draw {draw!r}" if law else f"the pattern {pattern!r}"
    for key in entry:
        if key not in keys:
            raise PatternError(
                f"{subject[0].upper()}{subject[1:]} takes no key {key!r}."
                f"{_nearest(str(key), keys)}",
                str(key),
                f"Its keys are {', '.join(keys)}.",
            )


def _nearest(name: str, names: Iterable[str]) -> str:
    close = difflib.get_close_matches(name, list(names), 1, 0.5)
    return f" The nearest is {close[0]!r}." if close else ""


def _flag(entry: dict[str, Any], key: str) -> bool:
    value = entry.get(key, False)
    if not isinstance(value, bool | np.bool_):
        raise PatternError(
            f"{key} = {value!r} is neither true nor false.", key, "Write true or false."
        )
    return bool(value)


def _accelerations(value: Any) -> tuple[float, ...]:
    if value is None:
        return ()
    values = list(value) if isinstance(value, list | tuple) else [value]
    for item in values:
        number = isinstance(item, int | float | np.number) and not isinstance(item, bool)
        if not number or not np.isfinite(item) or item < 1:
            raise PatternError(
                f"The acceleration {item!r} is not a number of at least 1.",
                "acceleration",
                "Give 1 for full sampling, or a larger number.",
            )
    return tuple(float(item) for item in values)
