"""``[acceptance]``: limits a measure must keep, ``<metric>_min``, ``_max``, ``_worst`` ..."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from mrics.errors import ProtocolError
from mrics.protocol.messages import nearest, place, shown

BASELINES = ("today", "full")
#: kinds of limits that are held against a difference to the baseline
DIFFERENCES = ("margin", "equivalence")


@dataclass(frozen=True)
class Limit:
    """One acceptance limit.

    Attributes
    ----------
    key : str
        As written, for example ``"ssim_min"``.
    metric : str
        Name of the measure.
    side : str
        ``"min"`` where the measure must not fall below the limit, ``"max"`` where it must not
        exceed it.
    kind : str
        ``"mean"``, ``"worst"`` (slice of any scan and draw), or ``"margin"`` and ``"equivalence"``
        against the baseline.
    value : float
        The limit.
    """

    key: str
    metric: str
    side: str
    kind: str
    value: float

    @property
    def worst(self) -> bool:
        """True where the worst slice is limited."""
        return self.kind == "worst"


def read_baseline(table: Mapping[str, Any], today: bool, path: object, text: str) -> str:
    """What margins are taken against: "today" or "full" (the full scan).

    Parameters
    ----------
    table : mapping
        The ``[acceptance]`` table; without ``baseline`` it is today's arm where there is one.
    today : bool
        Whether the protocol has a ``[today]`` table.

    Raises
    ------
    ProtocolError
        For another word, and for "today" without such a table.
    """
    given = table.get("baseline", "today" if today else "full")
    where = place(path, text, ("acceptance", "baseline"))
    if given not in BASELINES:
        raise ProtocolError(
            f"acceptance.baseline = {shown(given)} is not allowed.",
            where,
            'Give "today", or "full" for the full scan.',
        )
    if given == "today" and not today:
        raise ProtocolError(
            'baseline = "today", but the protocol has no [today].',
            where,
            'Add [today], or give "full" for the full scan.',
        )
    return str(given)


def read_limits(table: Mapping[str, Any], path: object, text: str) -> tuple[Limit, ...]:
    """The limits of the table, each checked against the measures mrics takes.

    Raises
    ------
    ProtocolError
        For an unknown measure or ending, a limit on the wrong side, a value that is no number and a
        margin that is not positive.
    """
    from mrics.quality import METRICS, acceptance_keys

    known = acceptance_keys()
    limits = []
    for key, value in table.items():
        if key == "baseline":
            continue
        where = place(path, text, ("acceptance", key))
        if key not in known:
            metric, _, kind = key.rpartition("_")
            if metric in METRICS and kind in ("min", "max"):
                better = METRICS[metric].direction
                raise ProtocolError(
                    f"{key} limits {metric} on the wrong side: {better} is better.",
                    where,
                    f"Use {metric}_{'min' if kind == 'max' else 'max'}, or {metric}_worst for the "
                    "worst slice.",
                )
            raise ProtocolError(f"Unknown acceptance limit {key!r}.", where, nearest(key, known))
        number = isinstance(value, int | float) and not isinstance(value, bool)
        if not number or not math.isfinite(value):
            raise ProtocolError(
                f"acceptance.{key} = {shown(value)} is not allowed.", where, "Give a finite number."
            )
        means = known[key]
        if means.kind in DIFFERENCES and not value > 0:
            raise ProtocolError(
                f"acceptance.{key} = {shown(value)} is no margin: a claim of no difference needs a "
                "positive one.",
                where,
                "Give the largest loss that is acceptable, in the metric's unit.",
            )
        limits.append(Limit(key, means.metric, means.side, means.kind, float(value)))
    return tuple(limits)
