"""The study folder: whose it is, and whether a study may be written there."""

from __future__ import annotations

import hashlib
import json
import os
from pathlib import Path

import mrics
from mrics.errors import StudyError
from mrics.protocol import Protocol
from mrics.study.files import plain, read_json, write_json

MARK = "study.json"


def claim_folder(folder: Path, protocol: Protocol, force: bool) -> None:
    """Make the folder this protocol's, or refuse.

    Raises
    ------
    StudyError
        Where the path is a file, holds something that is no study, holds another protocol's study
        (without ``force``), was written by a newer version, or cannot be written to.
    """
    name = str(folder)
    if folder.exists() and not folder.is_dir():
        raise StudyError(f"{name} is a file, not a folder.", name, "Name a folder for the study.")
    mark = folder / MARK
    if folder.is_dir() and not mark.is_file() and any(folder.iterdir()):
        raise StudyError(
            f"The folder {name} exists and is not a study.",
            name,
            "Name an empty or a new folder; nothing in this one was touched.",
        )
    key = protocol_key(protocol)
    if mark.is_file():
        held = read_json(mark)
        held = held if isinstance(held, dict) else {}
        if held.get("protocol_key") != key and not force:
            raise StudyError(
                f"The folder {name} holds the study of another protocol "
                f"({held.get('title', 'unknown')!r}).",
                str(mark),
                "Name another folder, or give --force to go on in this one: units whose scan, arm "
                "and draw are the same are kept, results.json is written anew.",
            )
    try:
        folder.mkdir(parents=True, exist_ok=True)
        if not os.access(folder, os.W_OK):
            raise PermissionError("permission denied")
        write_json(mark, {"mrics": mrics.__version__, "protocol_key": key, "title": protocol.title})
    except OSError as error:
        raise StudyError(
            f"The folder {name} cannot be written to ({error.strerror or error}).",
            name,
            "Name a folder you may write to.",
        ) from error


def protocol_key(protocol: Protocol) -> str:
    """Hash of the protocol's values: comments and spacing do not make another protocol."""
    text = json.dumps(plain(protocol.values()), sort_keys=True)
    return hashlib.sha256(text.encode()).hexdigest()
