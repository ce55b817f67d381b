"""A hash of the code that makes numbers, so that a changed method never reuses old results."""

from __future__ import annotations

import hashlib
from functools import cache
from pathlib import Path

# Rooms whose code decides what a unit's numbers are.
_ROOMS = ("numerics", "scan", "sampling", "encoding", "recovery", "quality")


@cache
def code_version() -> str:
    """First 16 hex digits of the SHA-256 over the source of the rooms that make numbers."""
    root = Path(__file__).parents[1]
    digest = hashlib.sha256()
    files = [p for room in _ROOMS for p in sorted((root / room).rglob("*.py"))]
    files += [root / "study" / "prepare.py", root / "study" / "units.py"]
    for path in files:
        digest.update(path.relative_to(root).as_posix().encode())
        digest.update(path.read_bytes())
    return digest.hexdigest()[:16]
