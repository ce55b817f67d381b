"""A file system of 300 kB, for what happens when it is full."""

from __future__ import annotations

import subprocess
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest


@contextmanager
def mounted(folder: Path, size: str = "300k") -> Iterator[Path]:
    """Mount a small memory file system on a new folder; skip where that is not allowed."""
    folder.mkdir()
    made = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", f"size={size}", "tmpfs", str(folder)], capture_output=True
    )
    if made.returncode:
        pytest.skip("needs the right to mount a small tmpfs")
    try:
        yield folder
    finally:
        subprocess.run(["umount", str(folder)], check=True)
