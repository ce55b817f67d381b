"""Training a patch dictionary on a protocol's scans, and what a study must say of one it uses."""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

from mrics.errors import RecoveryError, StudyError
from mrics.protocol import Arm, Protocol, ScanFiles, load_protocol
from mrics.recovery.dictionary.store import Dictionary, load_dictionary, save_dictionary
from mrics.scan import Axes
from mrics.study.prepare import PlaneChoice, prepare


def train(
    source: Protocol | str | Path | Sequence[str | Path],
    out: str | Path,
    *,
    axes: Axes | None = None,
    force: bool = False,
    progress: Callable[[int, int, str], None] | None = None,
    **settings: Any,
) -> Dictionary:
    """Learn a patch dictionary from fully sampled scans and write it.

    Parameters
    ----------
    source : Protocol, path or sequence of path
        A protocol or its file (``.toml``), whose scans and axes are taken; or NIfTI files.
    out : path
        File to write (npz): atoms, residual distribution, scan hashes, settings, version.
    axes : Axes, optional
        File axes of readout and phase where NIfTI files are given; default i and j.
    force : bool
        Replace an existing file.
    progress : callable, optional
        Called with (steps done, steps in all, label).
    **settings
        See :class:`mrics.recovery.dictionary.training.Training`.

    Returns
    -------
    Dictionary

    Raises
    ------
    MricsError
        Where scans, settings or the file cannot be used; nothing is written then.
    """
    # Compiled kernels are loaded here, not when a plan asks what a dictionary is.
    from mrics.recovery.dictionary.training import Training, TrainingScan, train_dictionary

    out = Path(out)
    chosen = Training(**settings)
    if out.exists() and not force:
        raise StudyError(f"{out} exists.", str(out), "Name another file, or replace it by force.")
    if not out.parent.is_dir():
        raise StudyError(f"{out.parent} is not a folder.", str(out), "Name a file in a folder.")
    files, axes, channel_axis = _sources(source, axes)
    tell = progress or (lambda done, total, label: None)
    scans = []
    for number, one in enumerate(files):
        tell(number, len(files) + 1, f"reading {one.path.name}")
        held = prepare(one, axes, PlaneChoice("all"), channel_axis)
        scans.append(
            TrainingScan(
                held.stack, held.body, one.path.name, held.scan.sha256, held.scan.frames,
                held.data_range, held.sigma, held.scan.magnitude_only,
            )
        )  # fmt: skip
    tell(len(files), len(files) + 1, "learning")
    dictionary = train_dictionary(scans, chosen)
    try:
        save_dictionary(dictionary, out)
    except OSError as error:
        raise StudyError(
            f"{out} cannot be written ({error.strerror}).",
            str(out),
            "Name a file in a folder you may write to.",
        ) from error
    tell(len(files) + 1, len(files) + 1, "written")
    return dictionary


def _sources(
    source: Protocol | str | Path | Sequence[str | Path], axes: Axes | None
) -> tuple[tuple[ScanFiles, ...], Axes, int | None]:
    """Files of the scans, their axes, and the axis of channels."""
    given = [source] if isinstance(source, Protocol | str | Path) else list(source)
    if len(given) == 1 and not isinstance(given[0], Protocol):
        only = Path(given[0])
        given = [load_protocol(only)] if only.suffix == ".toml" else [only]
    if len(given) == 1 and isinstance(given[0], Protocol):
        protocol = given[0]
        return protocol.scan_files(), protocol.axes(), protocol.grid.channel_axis
    if not given:
        raise StudyError("No scans to train on.", "scans", "Give a protocol or NIfTI files.")
    return tuple(ScanFiles(Path(str(one))) for one in given), axes or Axes("i", "j"), None


def check_dictionaries(arms: Iterable[Arm]) -> None:
    """Refuse a plan whose arms name dictionaries that cannot be used.

    Raises
    ------
    RecoveryError
        See :func:`mrics.recovery.dictionary.load_dictionary`; the message names the arm.
    """
    for arm in arms:
        path = arm.recovery_settings.get("dictionary")
        if path:
            try:
                load_dictionary(path, kind=arm.recovery_settings.get("kind"))
            except RecoveryError as error:
                raise RecoveryError(error.what, f"arm {arm.label}: {error.where}", error.fix) from (
                    error
                )


def dictionary_hash(settings: Mapping[str, Any]) -> str:
    """SHA-256 of the file that a recovery's settings name, empty where there is none."""
    path = settings.get("dictionary")
    return hashlib.sha256(Path(path).read_bytes()).hexdigest() if path else ""


def dictionary_notes(
    arms: Iterable[tuple[str, Mapping[str, Any]]], records: Sequence[Mapping[str, Any]]
) -> list[str]:
    """A warning for every arm whose dictionary was trained on a scan it is tested on."""
    notes = []
    for label, settings in arms:
        if settings.get("dictionary"):
            path = Path(settings["dictionary"])
            shared = load_dictionary(path).trained_on([r["sha256"] for r in records])
            if shared:
                notes.append(f"{label} ({path.name}): {shared}.")
    return notes
