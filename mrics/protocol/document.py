"""Read a protocol file into a checked, frozen :class:`Protocol`."""

from __future__ import annotations

import hashlib
import tomllib
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from datetime import date, time
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

from pydantic import ValidationError

from mrics.errors import MricsError, ProtocolError
from mrics.protocol import arms as _arms
from mrics.protocol import files as _files
from mrics.protocol.acceptance import DIFFERENCES, Limit, read_baseline, read_limits
from mrics.protocol.messages import Location, nearest, place, refuse, shown, within
from mrics.protocol.sections import (
    About,
    Coils,
    Grid,
    OpenSection,
    Recovery,
    Sampling,
    Section,
    Sequence,
    Study,
    Today,
)
from mrics.scan.volume import Axes

if TYPE_CHECKING:
    from mrics.quality.measures import Measures

LARGEST_FILE = 1_000_000
TABLES = ("protocol", "sequence", "grid", "today", "acceptance", "quality", "study", "coils")
LISTS = ("sampling", "recovery")
Fail = Callable[[str, Location, str], None]
AnySection = TypeVar("AnySection", Section, OpenSection)


@dataclass(frozen=True)
class Protocol:
    """A checked protocol.

    Attributes
    ----------
    path : Path
        The file; scan paths are relative to its folder.
    text : str
        The file's text.
    about, sequence, grid, today, sampling, recovery, study, coils
        The sections (``about`` is ``[protocol]``); ``today`` and ``coils`` are None where the
        file has none, ``sampling`` and ``recovery`` are tuples.
    acceptance : tuple of Limit
        The acceptance limits.
    baseline : str
        What their margins are taken against: "today" or "full".
    quality : mapping or None
        The ``[quality]`` table as it stands: measures beside the scores.
    """

    path: Path
    text: str
    about: About
    sequence: Sequence
    grid: Grid
    study: Study
    today: Today | None
    sampling: tuple[Sampling, ...]
    recovery: tuple[Recovery, ...]
    acceptance: tuple[Limit, ...]
    coils: Coils | None
    quality: Mapping[str, Any] | None = None
    baseline: str = "today"

    @property
    def title(self) -> str:
        """The protocol's title, or the file's name where it has none."""
        return self.about.title or self.path.stem

    @property
    def question(self) -> str:
        """What the study is to answer."""
        return self.about.question

    @property
    def sha256(self) -> str:
        """SHA-256 of the text."""
        return hashlib.sha256(self.text.encode()).hexdigest()

    def axes(self) -> Axes:
        """File axes of readout, phase and partition."""
        return Axes(self.grid.readout_axis, self.grid.phase_axis, self.grid.partition_axis)

    def arms(self) -> tuple[_arms.Arm, ...]:
        """Every arm to be studied, today's first; the full scan where margins refer to it."""
        arms = _arms.expand_arms(self.sampling, self.recovery, self.today, self.path.parent)
        held = any(limit.kind in DIFFERENCES for limit in self.acceptance)
        return _arms.with_full_scan(arms) if held and self.baseline == "full" else arms

    def scan_files(self) -> tuple[_files.ScanFiles, ...]:
        """Files of the scans, patterns expanded; raises ProtocolError where one is missing."""
        folder = self.path.parent
        scans = _files.expand(
            self.study.scans, folder, place(self.path, self.text, ("study", "scans"))
        )
        measures = self.measures() if self.quality else None
        if measures is None or not measures.labels:
            return scans
        where = place(self.path, self.text, ("quality", "labels"))
        return _files.with_labels(scans, measures.labels, folder, where)

    def training_files(self) -> tuple[_files.ScanFiles, ...]:
        """Files of the training scans; raises ProtocolError where one is studied as well."""
        where = place(self.path, self.text, ("study", "training_scans"))
        found = _files.expand(self.study.training_scans, self.path.parent, where)
        studied = {scan.path.resolve() for scan in self.scan_files()}
        for scan in found:
            if scan.path.resolve() in studied:
                raise ProtocolError(
                    f"Scan {scan.path} is a training scan and is studied too.",
                    where,
                    "Judge a trained weight on scans it was not chosen on.",
                )
        return found

    def measures(self) -> Measures | None:
        """Which measures beside the scores are taken; None where ``[quality]`` is not given."""
        from mrics.quality.measures import measures_from

        return None if self.quality is None else measures_from(self.quality)

    def values(self) -> dict[str, Any]:
        """Every key with its value, defaults included, as plain data for a results file."""
        return {
            "protocol": self.about.model_dump(),
            "sequence": self.sequence.model_dump(),
            "grid": self.grid.model_dump(),
            "today": self.today.model_dump() if self.today else None,
            "sampling": [entry.model_dump() for entry in self.sampling],
            "recovery": [entry.model_dump() for entry in self.recovery],
            "acceptance": {
                "baseline": self.baseline,
                **{limit.key: limit.value for limit in self.acceptance},
            },
            "study": self.study.model_dump(),
            "coils": self.coils.model_dump() if self.coils else None,
            "quality": None if self.quality is None else dict(self.quality),
        }


def load_protocol(path: str | Path) -> Protocol:
    """Read and check a protocol file.

    Parameters
    ----------
    path : str or Path
        TOML file, UTF-8, at most 1 MB.

    Raises
    ------
    ProtocolError
        Where the file cannot be read or a key is unknown, missing or out of range; the message
        names file, line and key.
    """
    file = Path(path)
    try:
        file = file.expanduser()
        if file.stat().st_size > LARGEST_FILE:
            raise ProtocolError(
                f"The file has {file.stat().st_size} bytes; a protocol has at most {LARGEST_FILE}.",
                str(file),
                "Give the protocol file, not a scan.",
            )
        text = file.read_bytes().decode("utf-8-sig")
    except (OSError, ValueError, RuntimeError) as error:
        if isinstance(error, UnicodeDecodeError):
            raise ProtocolError(
                "The file is not UTF-8 text.", str(file), "Save it as plain UTF-8 text."
            ) from error
        reason = getattr(error, "strerror", None) or str(error)
        raise ProtocolError(
            f"The protocol cannot be read: {reason}.",
            str(file),
            "Give the path of an existing TOML file; `mrics new SCAN...` writes one.",
        ) from error
    return from_text(text, file)


def from_text(text: str, path: str | Path = "protocol.toml") -> Protocol:
    """Check a protocol given as text; ``path`` is where it would lie (for relative scan paths)."""
    file = Path(path)
    raw = _parse(text, file)
    for name, value in raw.items():
        if name not in TABLES + LISTS:
            raise ProtocolError(
                f"Unknown section {name!r}.",
                place(file, text, (name,)),
                nearest(name, TABLES + LISTS),
            )
        wanted = tuple if name in LISTS else dict
        if not isinstance(value, wanted):
            brackets = f"[[{name}]]" if name in LISTS else f"[{name}]"
            raise ProtocolError(
                f"{name} = {shown(value)} is not a section.",
                place(file, text, (name,)),
                f"Write it as a table headed {brackets}.",
            )

    def section(model: type[AnySection], *location: int | str, needed: bool = True) -> Any:
        value: Any = raw.get(str(location[0]), {} if needed else None)
        if len(location) > 1:
            value = value[int(location[1])]
        return None if value is None else _validate(model, value, tuple(location), file, text)

    protocol = Protocol(
        path=file,
        text=text,
        about=section(About, "protocol"),
        sequence=section(Sequence, "sequence"),
        grid=section(Grid, "grid"),
        study=section(Study, "study"),
        today=section(Today, "today", needed=False),
        sampling=tuple(section(Sampling, "sampling", n) for n in range(_count(raw, "sampling"))),
        recovery=tuple(section(Recovery, "recovery", n) for n in range(_count(raw, "recovery"))),
        acceptance=read_limits(raw.get("acceptance", {}), file, text),
        coils=section(Coils, "coils", needed=False),
        quality=raw.get("quality"),
        baseline=read_baseline(raw.get("acceptance", {}), "today" in raw, file, text),
    )
    _check(protocol)
    return protocol


def _count(raw: Mapping[str, Any], name: str) -> int:
    return len(raw.get(name, ()))


def _parse(text: str, file: Path) -> dict[str, Any]:
    try:
        return {key: _frozen(value) for key, value in tomllib.loads(text).items()}
    except (ValueError, RecursionError) as error:
        what = "nested too deeply" if isinstance(error, RecursionError) else str(error).rstrip(".")
        raise ProtocolError(
            f"The file is not valid TOML: {what}.",
            str(file),
            'Mend that line; text stands in quotes ("..."), lists in [ ].',
        ) from error


def _frozen(value: Any) -> Any:
    """Lists as tuples, so that a protocol cannot be changed once read; dates, which no key takes,
    as text.
    """
    if isinstance(value, list):
        return tuple(_frozen(item) for item in value)
    if isinstance(value, dict):
        return {key: _frozen(item) for key, item in value.items()}
    return value.isoformat() if isinstance(value, date | time) else value


def _validate(
    model: type[AnySection], value: Any, location: Location, file: Path, text: str
) -> AnySection:
    try:
        return model.model_validate(value)
    except ValidationError as error:
        raise refuse(error, model, location, file, text) from None


def _check(protocol: Protocol) -> None:
    """What one key alone cannot say: keys that must fit each other and the other rooms' names."""

    def fail(what: str, location: Location, fix: str) -> None:
        raise ProtocolError(what, place(protocol.path, protocol.text, location), fix)

    grid, sequence, study = protocol.grid, protocol.sequence, protocol.study
    letters = [grid.readout_axis, grid.phase_axis, grid.partition_axis]
    named = [letter for letter in letters if letter is not None]
    if len(set(named)) < len(named):
        fail(
            f"The axis letters {', '.join(named)} repeat one letter.",
            ("grid",),
            "Give readout_axis, phase_axis and partition_axis three different letters.",
        )
    if sequence.three_d and grid.partition_axis is None:
        fail(
            f"Family {sequence.family!r} needs a partition axis.",
            ("grid", "partition_axis"),
            "Add partition_axis (one of i, j, k), or choose a 2-D family.",
        )
    if not sequence.three_d:
        for key in ("partition_axis", "partition_steps"):
            if getattr(grid, key) is not None:
                fail(
                    f"Family {sequence.family!r} has no partitions, but {key} is given.",
                    ("grid", key),
                    f"Remove {key}, or choose a 3-D family.",
                )
    elif grid.slices is not None:
        fail(
            f"Family {sequence.family!r} has partitions, but slices is given.",
            ("grid", "slices"),
            "Give partition_steps instead.",
        )
    noises = [k for k in ("sigma_added", "snr", "noise_percent") if getattr(study, k) is not None]
    if len(noises) > 1:
        fail(
            f"Added noise is given {len(noises)} times: {', '.join(noises)}.",
            ("study", noises[1]),
            "Keep one of them.",
        )
    for key in ("tissue_t2_ms", "echo_spacing_ms", "echo_train_length"):
        if study.echo_train_decay and getattr(sequence, key) is None:
            fail(
                f"echo_train_decay is asked for, but {key} is not given.",
                ("study", "echo_train_decay"),
                f"Add {key} to [sequence], or remove echo_train_decay.",
            )
    _ask_room(protocol, ("quality",), Protocol.measures, protocol)
    _check_limits(protocol, fail)
    _check_arms(protocol, fail)


def _check_limits(protocol: Protocol, fail: Fail) -> None:
    """Every limited measure must be taken: a study is too long to find out at its end."""
    from mrics.quality.metrics import SCORES

    if all(limit.metric in SCORES for limit in protocol.acceptance):
        return
    measures = protocol.measures()
    taken = SCORES | (measures.metrics if measures else frozenset())
    channels = protocol.coils is not None or protocol.grid.channel_axis is not None
    for limit in protocol.acceptance:
        split = limit.metric in ("error_measured", "error_missing", "error_invented")
        if split and channels:
            fail(
                f"{limit.key} limits a part of the error: not taken with receive channels.",
                ("acceptance", limit.key),
                "Take the limit out.",
            )
        if limit.metric not in taken:
            fail(
                f"{limit.key} limits a measure that is not taken.",
                ("acceptance", limit.key),
                "Ask for it in [quality], or take the limit out.",
            )


def _check_arms(protocol: Protocol, fail: Fail) -> None:
    if not protocol.sampling and protocol.today is None:
        fail(
            "The protocol has no arms: no [[sampling]] table and no [today].",
            (),
            "Add at least one [[sampling]] table and one [[recovery]] table.",
        )
    if protocol.sampling and not protocol.recovery:
        fail(
            "The protocol has no arms: no [[recovery]] table.",
            (),
            'Add [[recovery]] with method = "wavelet".',
        )
    _repeats(protocol, fail)
    for at, entry in enumerate(protocol.sampling):
        if entry.searched and not protocol.acceptance:
            fail(
                "A search needs something to pass, and there is no acceptance limit.",
                ("sampling", at, "acceleration"),
                "Add limits to [acceptance], or list accelerations.",
            )
        if entry.searched and entry.search_from >= entry.search_to:
            fail(
                f"search_from = {entry.search_from:g} is not below search_to = "
                f"{entry.search_to:g}.",
                ("sampling", at, "search_from"),
                "Give the slowest acceleration first.",
            )
        _ask_room(protocol, ("sampling", at), _check_sampling, entry)
        if not entry.accelerations and entry.extra.get("pattern") != "file":
            fail(
                "Key 'acceleration' is missing.",
                ("sampling", at, "acceleration"),
                "Add acceleration, one number from 1 or a list of them.",
            )
    for at, method in enumerate(protocol.recovery):
        _ask_room(protocol, ("recovery", at), _check_settings, method)
        if method.extra.get("weight") == "trained" and not protocol.study.training_scans:
            fail(
                'weight = "trained" needs scans to train on, and there are none.',
                ("recovery", at, "weight"),
                "Add training_scans to [study].",
            )
    if protocol.today is not None:
        _ask_room(protocol, ("today",), _check_today, protocol)


def _repeats(protocol: Protocol, fail: Fail) -> None:
    for section, entries in (("sampling", protocol.sampling), ("recovery", protocol.recovery)):
        labels = [
            entry.name or (entry.method if isinstance(entry, Recovery) else None)
            for entry in entries
        ]
        for at, label in enumerate(labels):
            if label is not None and label in labels[:at]:
                fail(
                    f"Two [[{section}]] tables are called {label!r}.",
                    (section, at),
                    "Give each a name of its own.",
                )
    for at, entry in enumerate(protocol.sampling):
        if len(set(entry.accelerations)) < len(entry.accelerations):
            fail(
                f"acceleration = {shown(entry.accelerations)} repeats a value.",
                ("sampling", at, "acceleration"),
                "List every acceleration once.",
            )


def _check_sampling(entry: Sampling) -> None:
    from mrics.sampling import check_sampling

    check_sampling(_arms.entry_keys(entry, entry.name or "", entry.acceleration))


def _check_settings(entry: Recovery) -> None:
    from mrics.recovery import check_settings

    check_settings(entry.method, entry.extra)


def _check_today(protocol: Protocol) -> None:
    assert protocol.today is not None
    try:
        entry, method = _arms.today_entry(protocol.today, protocol.sampling)
    except ValidationError as error:
        raise refuse(error, Sampling, ("today",), protocol.path, protocol.text) from None
    _check_sampling(entry)
    _check_settings(method)


def _ask_room(
    protocol: Protocol, location: Location, check: Callable[[Any], object], subject: Any
) -> None:
    """Run another room's check and put file, line and key before what it says."""
    try:
        check(subject)
    except MricsError as error:
        where = error.where
        if str(protocol.path) not in where:
            where = within(protocol.path, protocol.text, location, where)
        raise ProtocolError(error.what, where, error.fix) from error
