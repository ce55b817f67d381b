"""How much memory this process may still ask for."""

from __future__ import annotations

import os
from pathlib import Path

_CGROUP = Path("/sys/fs/cgroup")


def available_memory() -> int:
    """Bytes that can be allocated now: the system's figure, capped by limits of container and user.

    Where the system does not say (no ``/proc/meminfo``), half of the physical memory, and 4 GiB
    where that is unknown too.
    """
    system = _system_available()
    limit = _number(_CGROUP / "memory.max")
    if limit is not None:
        system = min(system, max(limit - (_number(_CGROUP / "memory.current") or 0), 0))
    return min(system, _address_space_left(system))


def _address_space_left(otherwise: int) -> int:
    """What ``ulimit -v`` leaves this process; ``otherwise`` where there is no such limit."""
    try:
        import resource

        limit = resource.getrlimit(resource.RLIMIT_AS)[0]
        if limit == resource.RLIM_INFINITY:
            return otherwise
        pages = int(Path("/proc/self/statm").read_text().split()[0])
        return max(limit - pages * os.sysconf("SC_PAGE_SIZE"), 0)
    except (ImportError, OSError, ValueError):
        return otherwise


def _system_available() -> int:
    try:
        for line in Path("/proc/meminfo").read_text().splitlines():
            if line.startswith("MemAvailable:"):
                return int(line.split()[1]) * 1024
    except OSError:
        pass
    try:
        return os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE") // 2
    except (AttributeError, OSError, ValueError):
        return 4 * 1024**3


def _number(path: Path) -> int | None:
    try:
        return int(path.read_text())
    except (OSError, ValueError):
        return None
