"""The compiler of kernels, with a folder for what it compiles that can be written.

Compiled kernels are kept beside their source or, where that cannot be written, under the user's
home. An installation by somebody else and no home leave neither; they then go to a folder of this
user in the system's temporary one.
"""

from __future__ import annotations

import os
import sys
import tempfile
from pathlib import Path

_VARIABLE = "NUMBA_CACHE_DIR"


def _writable(folder: Path) -> bool:
    """Whether the folder, or the nearest above it that exists, can be written."""
    while not folder.exists() and folder != folder.parent:
        folder = folder.parent
    return folder.is_dir() and os.access(folder, os.W_OK | os.X_OK)


def _own_folder() -> str:
    """A folder that only this user can write: compiled code is run without further question."""
    user = os.getuid() if hasattr(os, "getuid") else "user"
    folder = Path(tempfile.gettempdir()) / f"mrics-kernels-{user}"
    try:
        folder.mkdir(mode=0o700, exist_ok=True)
        state = folder.lstat()
        mine = folder.is_dir() and not folder.is_symlink() and state.st_mode & 0o077 == 0
        if mine and (user == "user" or state.st_uid == user):
            return str(folder)
    except OSError:
        pass
    return tempfile.mkdtemp(prefix="mrics-kernels-")


def _choose_folder() -> None:
    if os.environ.get(_VARIABLE):
        return
    home = os.environ.get("XDG_CACHE_HOME") or os.path.expanduser("~/.cache")
    if _writable(Path(__file__).parent / "__pycache__") or _writable(Path(home)):
        return
    os.environ[_VARIABLE] = _own_folder()
    if "numba" in sys.modules:
        sys.modules["numba"].config.CACHE_DIR = os.environ[_VARIABLE]


_choose_folder()

import numba  # noqa: E402

__all__ = ["numba"]
