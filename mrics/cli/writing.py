"""Values given on the command line, and files that must not be replaced by accident."""

from __future__ import annotations

import tomllib
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from mrics.errors import RecoveryError, StudyError
from mrics.scan import Axes, Scan, write_nifti
from mrics.scan.fitness import Inspection
from mrics.scan.remedies import remedied
from mrics.study.files import write_text


def write_new(path: Path, text: str, force: bool) -> None:
    """Write ``text`` to ``path``, atomically; an existing file needs ``force``."""
    if path.exists() and not force:
        raise StudyError(
            f"{path} exists.", str(path), "Name another file, or give --force to replace it."
        )
    try:
        write_text(path, text)
    except OSError as error:
        raise StudyError(
            f"{path} cannot be written ({error.strerror}).",
            str(path),
            "Name a file in a folder you may write to.",
        ) from error


def read_settings(given: Sequence[str]) -> dict[str, Any]:
    """``key=value`` options as settings; a value is a TOML value, or plain text."""
    settings: dict[str, Any] = {}
    for text in given:
        key, equals, value = text.partition("=")
        if not equals or not key.strip():
            raise RecoveryError(
                f"{text!r} is not key=value.", "--set", "Write for example: --set weight=2.0"
            )
        try:
            settings[key.strip()] = tomllib.loads(f"value = {value}")["value"]
        except tomllib.TOMLDecodeError:
            settings[key.strip()] = value.strip()
    return settings


def read_axes(letters: str | None) -> Axes | None:
    """Two or three axis letters: readout, phase, and partition for 3-D."""
    if letters is None:
        return None
    if len(letters) not in (2, 3):
        raise StudyError(
            f"--axes {letters!r} has {len(letters)} letters.",
            "--axes",
            "Give readout and phase, and the partition for 3-D: for example ij or ijk.",
        )
    return Axes(letters[0], letters[1], letters[2] if len(letters) == 3 else None)


def write_remedied(scan: Scan, inspection: Inspection, path: Path) -> tuple[str, ...]:
    """Write the scan with the remedies its findings ask for; say which."""
    after = remedied(scan, inspection.findings, sigma=inspection.noise.sigma)
    write_nifti(path, after.data, after)
    return tuple(after.remedies)
