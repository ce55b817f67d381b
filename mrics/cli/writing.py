"""Write a text file without replacing one by accident."""

from __future__ import annotations

from pathlib import Path

from mrics.errors import StudyError
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
