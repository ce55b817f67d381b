"""How a setting of a recovery is declared and checked: fields with ranges, choices and words."""

from __future__ import annotations

import difflib
import math
from collections.abc import Mapping
from dataclasses import dataclass, field, fields
from typing import Any

from mrics.errors import RecoveryError

#: ways of choosing a weight (see ``weights``) in place of a number
WEIGHT_WORDS = ("auto", "best", "trained", "held-out", "sure", "discrepancy")


def number(
    default: Any,
    low: float = -math.inf,
    high: float = math.inf,
    *,
    above: bool = False,
    words: tuple[str, ...] = (),
    whole: bool = False,
    optional: bool = False,
) -> Any:
    """A number field with its range; ``above`` excludes ``low``; ``words`` are also allowed."""
    rule = {
        "kind": "whole number" if whole else "number",
        "low": low,
        "high": high,
        "above": above,
        "words": words,
        "optional": optional,
    }
    return field(default=default, metadata=rule)


def weight_field() -> Any:
    """A weight in units of sigma, or how to choose it; the driver puts the number in its place."""
    return number("auto", 0.0, above=True, words=WEIGHT_WORDS)


def phase_field() -> Any:
    """Whether the image's phase is free or that of the calibration region."""
    return choice("free", ("free", "smooth"))


def choice(default: str, choices: tuple[str, ...]) -> Any:
    """A text field with its allowed values."""
    return field(default=default, metadata={"kind": "choice", "words": choices})


@dataclass(frozen=True)
class Settings:
    """Base of all settings; checks every field against its declared range.

    Raises
    ------
    RecoveryError
        Where a value is of the wrong kind or out of range.
    """

    def __post_init__(self) -> None:
        for entry in fields(self):
            _check_value(entry.name, getattr(self, entry.name), entry.metadata)


def nearest(name: object, known: Any) -> str:
    """A half sentence that names the nearest known word, or nothing."""
    close = difflib.get_close_matches(str(name), list(known), 1, 0.5)
    return f"; did you mean {close[0]!r}?" if close else ""


def _check_value(name: str, value: Any, rule: Mapping[str, Any]) -> None:
    words = rule.get("words", ())
    if rule.get("optional") and value is None:
        return
    if isinstance(value, str) and value in words:
        return
    if rule["kind"] == "flag":
        good = isinstance(value, bool)
        wanted = "true or false"
    elif rule["kind"] == "numbers":
        good = isinstance(value, list | tuple) and 0 < len(value) <= 12
        good = good and all(_is_number(one) and one > 0 for one in value)
        wanted = "a list of 1 to 12 numbers above 0"
    elif rule["kind"] == "text":
        good = isinstance(value, str)
        wanted = "a text"
    elif rule["kind"] == "choice":
        good = False
        wanted = f"one of {', '.join(map(repr, words))}"
    else:
        low, high = rule["low"], rule["high"]
        whole = rule["kind"] == "whole number"
        good = (
            _is_number(value)
            and (isinstance(value, int) or not whole)
            and (value > low if rule["above"] else value >= low)
            and value <= high
        )
        wanted = f"a {rule['kind']}"
        if low > -math.inf:
            wanted += f" {'above' if rule['above'] else 'of at least'} {low:g}"
        if high < math.inf:
            wanted += f" and at most {high:g}"
        wanted = "".join([wanted, *(f" or {word!r}" for word in words)])
    if not good:
        hint = nearest(value, words) if isinstance(value, str) else ""
        raise RecoveryError(
            f"Setting {name} must be {wanted}, got {value!r}{hint}.",
            name,
            "Change it or leave it out for the default.",
        )


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)
