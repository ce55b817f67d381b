"""The arms of a study: sampling entry x acceleration x recovery entry, and today's protocol."""

from __future__ import annotations

import re
import unicodedata
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from mrics.errors import ProtocolError
from mrics.protocol.messages import nearest
from mrics.protocol.sections import Recovery, Sampling, Today

FILE_KEYS = ("file", "table", "training", "dictionary")


@dataclass(frozen=True)
class Arm:
    """One pattern family at one acceleration with one recovery.

    Attributes
    ----------
    id : str
        Readable and unique within the protocol, for example ``"power-law-r4-wavelet"``.
    label : str
        The same for people, for example ``"power law, R = 4, wavelet"``.
    today : bool
        True for the protocol now in use.
    sampling_name : str
        Name of the sampling entry.
    sampling : dict
        Its keys, as ``mrics.sampling.draw_entry`` takes them.
    acceleration : float or None
        Acceleration asked for; None where a pattern file brings its own.
    recovery : str
        Method.
    recovery_name : str
        Name of the recovery entry.
    recovery_settings : dict
        Settings of the method.
    averages : int or None
        Averages of this arm where they differ from those of ``[sequence]``.
    search : str
        Label of the search that may choose this arm; empty for arms that are always run.
    full_scan : bool
        True for the arm that acquires everything and that margins are taken against.
    weight_rule : str
        How a weight was trained, once it was; else empty.
    """

    id: str
    label: str
    today: bool
    sampling_name: str
    sampling: dict[str, Any] = field(hash=False)
    acceleration: float | None
    recovery: str
    recovery_name: str
    recovery_settings: dict[str, Any] = field(hash=False)
    averages: int | None = None
    search: str = ""
    full_scan: bool = False
    weight_rule: str = ""


def sampling_name(entry: Sampling, others: tuple[Sampling, ...] = ()) -> str:
    """The entry's name, or its pattern or law and draw, numbered where earlier ones are equal."""
    plain = entry.name or " ".join(
        str(entry.extra[key]) for key in ("pattern", "law", "draw") if key in entry.extra
    )
    earlier = sum(sampling_name(other) == plain for other in others) if others else 0
    return f"{plain} {earlier + 1}" if earlier and not entry.name else plain or "sampling"


def expand_arms(
    sampling: tuple[Sampling, ...],
    recovery: tuple[Recovery, ...],
    today: Today | None,
    folder: Path,
) -> tuple[Arm, ...]:
    """Every arm, today's first, ids unique and independent of the order of other entries.

    Files that an entry names are taken relative to ``folder``.
    """
    arms: list[Arm] = []
    if today is not None:
        entry, today_recovery = today_entry(today, sampling)
        arms.append(_arm(entry, entry.accelerations[0], today_recovery, sampling_name(entry), True))
    for at, entry in enumerate(sampling):
        name = sampling_name(entry, sampling[:at])
        for acceleration in entry.accelerations or (None,):
            for method in recovery:
                arms.append(_arm(entry, acceleration, method, name, False))
    return tuple(
        replace(
            arm,
            sampling=_with_folder(arm.sampling, folder),
            recovery_settings=_with_folder(arm.recovery_settings, folder),
        )
        for arm in _unique(arms)
    )


def with_full_scan(arms: tuple[Arm, ...]) -> tuple[Arm, ...]:
    """The arms with the full scan marked; it is added at the end where none acquires all."""
    for at, arm in enumerate(arms):
        if arm.sampling.get("pattern") == "full":
            return (*arms[:at], replace(arm, full_scan=True), *arms[at + 1 :])
    entry = Sampling.model_validate({"name": "full scan", "pattern": "full"})
    added = _arm(entry, 1.0, Recovery(method="zero-filled", name=None), "full scan", False)
    return _unique([*arms, replace(added, label="full scan", full_scan=True)])


def _first(accelerations: tuple[float, ...]) -> float | None:
    return accelerations[0] if accelerations else None


def _with_folder(keys: dict[str, Any], folder: Path) -> dict[str, Any]:
    """The keys of an entry with the files they name relative to ``folder``."""

    def placed(value: Any) -> Any:
        if isinstance(value, tuple):
            return tuple(placed(item) for item in value)
        if not isinstance(value, str):
            return value
        try:
            return str(folder / Path(value).expanduser())
        except RuntimeError:
            # There is no such user; the file is then reported as missing under this name.
            return str(folder / value)

    return {key: placed(value) if key in FILE_KEYS else value for key, value in keys.items()}


def today_entry(today: Today, sampling: tuple[Sampling, ...]) -> tuple[Sampling, Recovery]:
    """Today's arm as a sampling and a recovery entry.

    ``sampling`` is the name of a ``[[sampling]]`` table, whose keys are then taken over, or a
    pattern or law of the sampling room; further keys of ``[today]`` go on top.

    Raises
    ------
    ProtocolError
        For a name that is none of these.
    """
    from mrics.sampling import LAWS, PATTERNS

    names = [sampling_name(other, sampling[:at]) for at, other in enumerate(sampling)]
    asked = today.sampling
    if isinstance(asked, dict):
        keys = dict(asked)
    elif asked in names:
        keys = {"name": asked, **sampling[names.index(asked)].extra}
    elif asked in PATTERNS:
        keys = {"pattern": asked}
    elif asked in LAWS:
        keys = {"law": asked}
    else:
        raise ProtocolError(
            f"sampling = {asked!r} is not known.",
            "sampling",
            nearest(asked, [*names, *PATTERNS, *LAWS]),
        )
    keys.update(today.extra)
    plain = "steps" in keys or keys.get("pattern") in ("full", "file")
    asked_for = 1.0 if today.acceleration is None and not plain else today.acceleration
    for key, value in (("acceleration", asked_for), ("averages", today.averages)):
        if value is not None:
            keys[key] = value
    keys.setdefault("name", str(keys.get("pattern", keys.get("law", "today"))))
    entry = Sampling(**keys)
    if isinstance(today.recovery, dict):
        return entry, Recovery(**today.recovery)
    return entry, Recovery(method=today.recovery, name=None)


def _arm(
    entry: Sampling, acceleration: float | None, method: Recovery, name: str, today: bool
) -> Arm:
    recovery_name = method.name or method.method
    parts = [name, recovery_name] if acceleration is None else []
    parts = parts or [name, f"r{acceleration:g}", recovery_name]
    identity = "-".join(slug(part) for part in (["today", *parts] if today else parts))
    size = "from file" if acceleration is None else f"R = {acceleration:g}"
    label = f"{name}, {size}, {recovery_name}"
    return Arm(
        id=identity,
        label=f"today: {label}" if today else label,
        today=today,
        sampling_name=name,
        sampling=entry_keys(entry, name, acceleration),
        acceleration=acceleration,
        recovery=method.method,
        recovery_name=recovery_name,
        recovery_settings=method.extra,
        averages=entry.averages,
        search=f"{name}, {recovery_name}" if entry.searched and not today else "",
    )


def entry_keys(
    entry: Sampling, name: str, acceleration: float | tuple[float, ...] | None
) -> dict[str, Any]:
    """The entry's keys as the sampling room takes them."""
    asked = {} if acceleration is None else {"acceleration": acceleration}
    return {"name": name, **asked, **entry.extra}


def slug(text: str) -> str:
    """Lower-case letters, digits, points and hyphens; never empty."""
    plain = unicodedata.normalize("NFKD", text).encode("ascii", "ignore").decode().lower()
    return re.sub(r"[^a-z0-9.]+", "-", plain).strip("-.") or "entry"


def _unique(arms: list[Arm]) -> tuple[Arm, ...]:
    """Number the ids that repeat (entries whose names differ only in what a slug drops)."""
    seen: dict[str, int] = {}
    out = []
    for arm in arms:
        seen[arm.id] = seen.get(arm.id, 0) + 1
        again = seen[arm.id]
        out.append(replace(arm, id=f"{arm.id}-{again}") if again > 1 else arm)
    return tuple(out)
