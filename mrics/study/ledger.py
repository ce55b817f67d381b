"""The ledger of a study: every finished unit, committed at once, by one process at a time."""

from __future__ import annotations

import fcntl
import hashlib
import json
import os
import sqlite3
from collections.abc import Iterable
from datetime import UTC, datetime
from pathlib import Path
from types import TracebackType
from typing import Any

from mrics.errors import StudyError
from mrics.study.files import plain

LEDGER = "ledger.sqlite"
LOCK = ".running"
VERSION = 2


class Ledger:
    """Finished units of a study folder, on disk.

    Opening takes the folder for this process: a second run is refused until the first ends. A
    unit is committed, with the disk told to keep it, before the next one is waited for; a killed
    run loses only the units that were being computed.

    Parameters
    ----------
    folder : Path
        Study folder.

    Raises
    ------
    StudyError
        Where another run holds the folder, the ledger was written by a newer version, cannot be
        read, or the disk is full.
    """

    def __init__(self, folder: Path) -> None:
        self._path = folder / LEDGER
        self._lock = _take(folder / LOCK)
        try:
            self._open()
        except BaseException:
            self._release()
            raise

    def _open(self) -> None:
        try:
            self._base = sqlite3.connect(self._path)
        except sqlite3.Error as error:
            raise self._unusable(error) from error
        try:
            version = self._base.execute("PRAGMA user_version").fetchone()[0]
            if version not in (0, VERSION):
                raise StudyError(
                    f"The ledger has format {version}; this version of mrics reads {VERSION}.",
                    str(self._path),
                    "Use the mrics that wrote it, or name another folder.",
                )
            self._base.execute("PRAGMA synchronous = FULL")
            self._base.execute(
                "CREATE TABLE IF NOT EXISTS units (key TEXT PRIMARY KEY,"
                " finished TEXT NOT NULL, result TEXT NOT NULL, checksum TEXT NOT NULL)"
            )
            self._base.execute(f"PRAGMA user_version = {VERSION}")
            self._base.commit()
        except (sqlite3.Error, OverflowError) as error:
            self._base.close()
            raise self._unusable(error) from error

    def finished(self, keys: Iterable[str]) -> dict[str, dict[str, Any]]:
        """Results of those of the units that are finished."""
        wanted = list(dict.fromkeys(keys))
        found: dict[str, dict[str, Any]] = {}
        try:
            for start in range(0, len(wanted), 500):
                part = wanted[start : start + 500]
                marks = ",".join("?" * len(part))
                rows = self._base.execute(
                    f"SELECT key, result, checksum FROM units WHERE key IN ({marks})", part
                )
                for key, result, checksum in rows:
                    if not isinstance(result, str) or _checksum(key, result) != checksum:
                        raise self._unusable(ValueError("a unit is damaged"))
                    found[key] = json.loads(result)
        except (sqlite3.Error, OverflowError) as error:
            raise self._unusable(error) from error
        return found

    def commit(self, key: str, result: dict[str, Any]) -> None:
        """Keep a finished unit."""
        now = datetime.now(UTC).isoformat(timespec="seconds")
        text = json.dumps(plain(result), allow_nan=False)
        try:
            self._base.execute(
                "INSERT OR REPLACE INTO units (key, finished, result, checksum)"
                " VALUES (?, ?, ?, ?)",
                (key, now, text, _checksum(key, text)),
            )
            self._base.commit()
        except (sqlite3.Error, OverflowError) as error:
            raise self._unusable(error) from error

    def close(self) -> None:
        """Close the ledger and let go of the folder."""
        self._base.close()
        self._release()

    def __enter__(self) -> Ledger:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def _release(self) -> None:
        os.ftruncate(self._lock, 0)
        os.close(self._lock)

    def _unusable(self, error: Exception) -> StudyError:
        if "full" in str(error):
            return StudyError(
                "The disk is full: the last unit could not be kept.",
                str(self._path),
                "Make room and run again; finished units are kept.",
            )
        return StudyError(
            f"The ledger of the study cannot be used ({error}).",
            str(self._path),
            "Move the file away and run again: its units are then computed anew.",
        )


def _checksum(key: str, text: str) -> str:
    """A damaged disk can leave a number changed where the database still reads."""
    return hashlib.sha256(f"{key} {text}".encode()).hexdigest()


def _take(path: Path) -> int:
    """An open file that holds the folder's lock; the kernel frees it when the process ends."""
    try:
        handle = os.open(path, os.O_RDWR | os.O_CREAT, 0o644)
    except OSError as error:
        raise StudyError(
            f"The study folder cannot be written to ({error.strerror}).",
            str(path),
            "Name a folder you may write to.",
        ) from error
    try:
        fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError as error:
        holder = os.read(handle, 200).decode(errors="replace").strip() or "another process"
        os.close(handle)
        raise StudyError(
            f"Another run is at work in this folder ({holder}).",
            str(path.parent),
            "Wait for it to end, stop it, or name another folder.",
        ) from error
    os.ftruncate(handle, 0)
    now = datetime.now(UTC).isoformat(timespec="seconds")
    os.write(handle, f"process {os.getpid()}, since {now}".encode())
    return handle
