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
from mrics.sampling.grid import check_calibration, check_partial_fourier
from mrics.sampling.laws import LAWS, law_parameters
from mrics.sampling.regular import check_shift, lattice_steps

DRAWS = ("exact-count", "bernoulli", "poisson-disc", "low-discrepancy", "jittered")
# The keys a pattern takes beside the common ones.
PATTERNS: dict[str, tuple[str, ...]] = {
    "random": ("law", "draw", "per_axis", "best_of", "best_by", "frame_draws"),
    "full": (),
    "equispaced": ("steps", "frame_draws"),
    "shifted lattice": ("steps", "shift", "frame_draws"),
    "spokes": ("golden_order", "frame_draws"),
    "spiral": ("golden_order", "turns", "frame_draws"),
    "file": ("file",),
}
_ANY_SIZE = 1 << 30
FRAME_DRAWS = ("complementary", "independent", "same")
CRITERIA = ("point-spread", "wavelet-scales")
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
    source : object
        What the law's map is made of (``training``, ``table``), None for laws of the radius.
    elliptical, per_axis : bool
        Shutter; law per axis.
    best_of, best_by : int, str
        Candidates per draw, and what ranks them.
    frame_draws : str
        What the frames of a series share.
    options : dict
        Further keys of the pattern, as written.
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
    source: Any = None
    elliptical: bool = False
    per_axis: bool = False
    best_of: int = 1
    best_by: str = "point-spread"
    frame_draws: str = "same"
    options: dict[str, Any] = field(default_factory=dict)
    name: str = ""


def entry_keys(pattern: str, law: str = "") -> tuple[str, ...]:
    """Every key an entry of this pattern and law may hold, sorted."""
    keys = {*COMMON, *PATTERNS[pattern]}
    if law:
        keys |= set(LAWS[law].parameters)
        if LAWS[law].source:
            keys.add(LAWS[law].source)
    return tuple(sorted(keys))


def check_sampling(entry: dict[str, Any]) -> None:
    """Check the keys and values of one sampling entry, without a grid.

    Raises
    ------
    PatternError
        For an unknown pattern, law, draw or key (the nearest is named), or a value out of range.
    """
    parsed = parse_entry(entry)
    for key, check in (
        ("calibration", check_calibration),
        ("partial_fourier", check_partial_fourier),
    ):
        value = entry.get(key, 1)
        # a grid that nothing is too large for; the real one is asked when the entry is drawn
        check(value, (_ANY_SIZE,) * (1 if np.isscalar(value) else len(value)))
    if parsed.pattern in ("equispaced", "shifted lattice"):
        steps = parsed.options.get("steps")
        grid = (_ANY_SIZE,) * (1 if steps is None or np.isscalar(steps) else len(steps))
        for acceleration in parsed.accelerations or ((1.0,) if steps is None else (None,)):
            lattice_steps(grid, acceleration, steps)


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
    _check_keys(entry, pattern, law)
    sharing = entry.get("frame_draws", "complementary" if law else "same")
    return Entry(
        pattern=pattern,
        law=law,
        draw=draw,
        law_settings=law_parameters(law, entry) if law else {},
        source=entry.get(LAWS[law].source) if law else None,
        accelerations=_accelerations(entry.get("acceleration")),
        calibration=entry.get("calibration", 0),
        partial_fourier=entry.get("partial_fourier", 1.0),
        elliptical=_flag(entry, "elliptical"),
        per_axis=_flag(entry, "per_axis"),
        best_of=_whole(entry.get("best_of", 1), "best_of", 1, 100_000),
        best_by=_known(entry.get("best_by", "point-spread"), CRITERIA, "best_by"),
        frame_draws=_known(sharing, FRAME_DRAWS, "frame_draws"),
        options=_options(entry),
        name=str(entry.get("name", "")),
    )


def _options(entry: dict[str, Any]) -> dict[str, Any]:
    """Keys of regular patterns, those that need no grid checked."""
    options: dict[str, Any] = {key: entry[key] for key in ("steps", "file") if key in entry}
    if "shift" in entry:
        options["shift"] = check_shift(entry["shift"])
    if "golden_order" in entry:
        options["golden_order"] = _whole(entry["golden_order"], "golden_order", 1, 100)
    if "turns" in entry:
        turns = entry["turns"]
        number = isinstance(turns, int | float) and not isinstance(turns, bool)
        if not number or not 0 < turns <= 1000:
            raise PatternError(
                f"turns = {turns!r} is not a number above 0 and up to 1000.",
                "turns of the pattern 'spiral'",
                "Give how often an arm goes around, such as 8.",
            )
        options["turns"] = float(turns)
    return options


def _known(name: Any, table: Iterable[str], key: str) -> str:
    names = sorted(table)
    if name in names:
        return str(name)
    raise PatternError(
        f"The {key} {name!r} is not known.{_nearest(str(name), names)}",
        key,
        f"Use one of {', '.join(names)}.",
    )


def _check_keys(entry: dict[str, Any], pattern: str, law: str) -> None:
    keys = entry_keys(pattern, law)
    subject = f"The law {law!r}" if law else f"The pattern {pattern!r}"
    for key in entry:
        if key not in keys:
            raise PatternError(
                f"{subject} takes no key {key!r}.{_nearest(str(key), keys)}",
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


def _whole(value: Any, key: str, low: int, high: int) -> int:
    whole = isinstance(value, int | np.integer) and not isinstance(value, bool)
    if not whole or not low <= value <= high:
        raise PatternError(
            f"{key} = {value!r} is not a whole number from {low} to {high}.",
            key,
            "Give a whole number in that range.",
        )
    return int(value)


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
