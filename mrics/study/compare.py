"""Two studies side by side: what changed in the protocol, which numbers moved."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from mrics.errors import StudyError
from mrics.study.files import read_json

SCHEMA = 1


@dataclass(frozen=True)
class Change:
    """One key of the protocol that differs; None where a study lacks it."""

    key: str
    before: Any
    after: Any


@dataclass(frozen=True)
class Move:
    """One metric of one arm in two studies.

    Attributes
    ----------
    arm, metric : str
        Arm id and metric name.
    before, after : float
        Means.
    beyond : bool or None
        True where the two intervals do not overlap, None where a study has no interval.
    """

    arm: str
    metric: str
    before: float
    after: float
    beyond: bool | None


@dataclass(frozen=True)
class Difference:
    """What :func:`compare_studies` finds.

    Attributes
    ----------
    changes : tuple of Change
        Keys of the protocol that differ.
    moves : tuple of Move
        Metrics of the arms both studies have, where the mean differs.
    verdicts : tuple of (arm id, before, after)
        Arms whose verdict differs.
    only_before, only_after : tuple of str
        Arms that one study has.
    scans : tuple of Change
        Scans that differ, by label and hash.
    """

    changes: tuple[Change, ...]
    moves: tuple[Move, ...]
    verdicts: tuple[tuple[str, str, str], ...]
    only_before: tuple[str, ...]
    only_after: tuple[str, ...]
    scans: tuple[Change, ...]


def compare_studies(before: str | Path, after: str | Path) -> Difference:
    """Compare two finished studies.

    Raises
    ------
    StudyError
        Where a folder holds no finished study, or one of a newer version.
    """
    one, two = load_results(Path(before)), load_results(Path(after))
    arms_one = {arm["id"]: arm for arm in one["arms"]}
    arms_two = {arm["id"]: arm for arm in two["arms"]}
    shared = [arm for arm in arms_one if arm in arms_two]
    return Difference(
        changes=tuple(_changes(_flat(one["protocol"]["values"]), _flat(two["protocol"]["values"]))),
        moves=tuple(move for arm in shared for move in _moves(arms_one[arm], arms_two[arm])),
        verdicts=tuple(
            (arm, arms_one[arm]["verdict"]["status"], arms_two[arm]["verdict"]["status"])
            for arm in shared
            if arms_one[arm]["verdict"]["status"] != arms_two[arm]["verdict"]["status"]
        ),
        only_before=tuple(arm for arm in arms_one if arm not in arms_two),
        only_after=tuple(arm for arm in arms_two if arm not in arms_one),
        scans=tuple(
            _changes(
                {scan["id"]: scan["sha256"][:12] for scan in one["scans"]},
                {scan["id"]: scan["sha256"][:12] for scan in two["scans"]},
            )
        ),
    )


def load_results(folder: Path) -> dict[str, Any]:
    """``results.json`` of a finished study.

    Raises
    ------
    StudyError
        Where it is missing, damaged or of a newer version.
    """
    path = folder / "results.json"
    results = read_json(path)
    if not isinstance(results, dict) or "arms" not in results:
        raise StudyError(
            f"{folder} holds no finished study.",
            str(path),
            "Give the folder that `mrics run` wrote to, after it has finished.",
        )
    if results.get("schema", 0) > SCHEMA:
        raise StudyError(
            f"The results have format {results['schema']}; this version reads up to {SCHEMA}.",
            str(path),
            "Use the newer mrics.",
        )
    return results


def _changes(before: dict[str, Any], after: dict[str, Any]) -> Iterator[Change]:
    for key in dict.fromkeys([*before, *after]):
        if before.get(key) != after.get(key):
            yield Change(key, before.get(key), after.get(key))


def _moves(before: dict[str, Any], after: dict[str, Any]) -> Iterator[Move]:
    for name, one in before["metrics"].items():
        two = after["metrics"].get(name)
        if two is None or one["mean"] == two["mean"]:
            continue
        beyond = None
        if one["interval"] and two["interval"]:
            beyond = (
                one["interval"]["high"] < two["interval"]["low"]
                or two["interval"]["high"] < one["interval"]["low"]
            )
        yield Move(before["id"], name, one["mean"], two["mean"], beyond)


def _flat(value: Any, key: str = "") -> dict[str, Any]:
    """Nested tables as dotted keys."""
    if isinstance(value, dict):
        found: dict[str, Any] = {}
        for name, inner in value.items():
            found |= _flat(inner, f"{key}.{name}" if key else name)
        return found
    if isinstance(value, list) and any(isinstance(item, dict) for item in value):
        found = {}
        for number, inner in enumerate(value, start=1):
            found |= _flat(inner, f"{key}[{number}]")
        return found
    return {key: value}
