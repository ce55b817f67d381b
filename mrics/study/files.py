"""Plain values and atomic writes for result files."""

from __future__ import annotations

import json
import math
import os
import re
import tempfile
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

# A quoted string that starts as an absolute path does: / or ~, a drive, a share.
_QUOTED = re.compile(r"""(["'])(?:~|[A-Za-z]:(?=[\\/])|[\\/])[^"'\n]*([\\/][^"'\\/\n]+)(?=\1)""")


def plain(value: Any) -> Any:
    """A value as JSON holds it: numbers with 7 digits, no NaN or infinity (null instead)."""
    if isinstance(value, Mapping):
        return {str(k): plain(v) for k, v in value.items()}
    if isinstance(value, np.ndarray):
        return plain(value.tolist())
    if isinstance(value, list | tuple):
        return [plain(v) for v in value]
    if isinstance(value, bool | np.bool_):
        return bool(value)
    if isinstance(value, int | np.integer):
        return int(value)
    if isinstance(value, float | np.floating):
        number = float(value)
        return float(f"{number:.7g}") if math.isfinite(number) else None
    if value is None or isinstance(value, str):
        return value
    return str(value)


def without_folders(value: Any) -> Any:
    """A value whose absolute paths are cut to ``.../name``, also where a text quotes them."""
    if isinstance(value, Mapping):
        return {k: without_folders(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [without_folders(v) for v in value]
    if isinstance(value, str):
        return _QUOTED.sub(r"\1...\2", f'"{value}"')[1:-1] if value else value
    return value


def write_text(path: Path, text: str) -> None:
    """Write a file whole or not at all, making its folder."""
    path.parent.mkdir(parents=True, exist_ok=True)
    replace_text(path, text)


def replace_text(path: Path, text: str) -> None:
    """A temporary name in the same folder, which must exist, then a rename."""
    handle, temporary = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.")
    try:
        with os.fdopen(handle, "w", encoding="utf-8", newline="\n") as stream:
            stream.write(text)
        os.chmod(temporary, 0o644)
        os.replace(temporary, path)
    except BaseException:
        Path(temporary).unlink(missing_ok=True)
        raise


def write_json(path: Path, value: Any) -> None:
    """Write plain values as JSON, atomically."""
    write_text(path, json.dumps(plain(value), indent=1, allow_nan=False) + "\n")


def read_json(path: Path) -> Any:
    """Read a JSON file; None where it is missing or damaged (it is then made again)."""
    try:
        return json.loads(path.read_text(encoding="utf-8"))
    except (FileNotFoundError, json.JSONDecodeError, UnicodeDecodeError):
        return None
