"""Many inputs under a memory and a time limit each, in processes of their own."""

from __future__ import annotations

import contextlib
import gc
import json
import os
import resource
import signal
import traceback
import warnings
from collections import Counter
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

from hypothesis import HealthCheck, Phase, given, seed, settings
from hypothesis.strategies import SearchStrategy

from mrics.errors import MricsError

Use = Callable[[Any, Path], object]
MIB = 2**20


@contextlib.contextmanager
def memory_for(extra: int) -> Iterator[None]:
    """At most ``extra`` more bytes of address space than the process has now."""
    soft, hard = resource.getrlimit(resource.RLIMIT_AS)
    pages = int(Path("/proc/self/statm").read_text().split()[0])
    resource.setrlimit(resource.RLIMIT_AS, (pages * os.sysconf("SC_PAGE_SIZE") + extra, hard))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_AS, (soft, hard))


def outcome(use: Use, case: Any, folder: Path) -> str:
    """ "read", "refused", or what went wrong; anything but a helpful refusal is a fault."""
    try:
        use(case, folder)
    except MricsError as error:
        return "refused" if error.what and error.where and error.fix else f"bare: {error}"
    except Exception:
        return traceback.format_exc()
    return "read"


def campaign(
    strategy: SearchStrategy[Any],
    use: Use,
    folder: Path,
    *,
    count: int,
    memory: int = 64 * MIB,
    seconds: int = 10,
    chunk: int = 1000,
) -> tuple[Counter[str], list[str]]:
    """Use ``count`` examples; counts of "read" and "refused", and the faults.

    ``use(case, folder)`` writes the case into the folder and reads it with the code under test. A
    case that computes for more than ``seconds`` ends its process, and is a fault.
    """
    counts: Counter[str] = Counter()
    faults: list[str] = []
    done = 0
    for number in range(0, count, chunk):
        report = folder / f"report-{number}.json"
        child = os.fork()
        if child == 0:
            code = 1
            with contextlib.suppress(BaseException):
                size = min(chunk, count - number)
                _child(strategy, use, folder, size, number, memory, seconds, report)
                code = 0
            os._exit(code)
        _, status = os.waitpid(child, 0)
        if status:
            kept = folder / f"ended-{number}"
            os.rename(folder / "case", kept)
            faults.append(f"chunk {number}: the process ended with status {status}, see {kept}")
            continue
        found = json.loads(report.read_text())
        counts.update(found["counts"])
        faults += found["faults"]
        done += sum(found["counts"].values())
    assert done + len(faults) >= count or faults, f"only {done} of {count} cases ran"
    return counts, faults


def _child(
    strategy: SearchStrategy[Any],
    use: Use,
    folder: Path,
    size: int,
    number: int,
    memory: int,
    seconds: int,
    report: Path,
) -> None:
    for number in (signal.SIGALRM, signal.SIGPROF):
        signal.signal(number, signal.SIG_DFL)
    work = folder / "case"
    work.mkdir(exist_ok=True)
    counts: Counter[str] = Counter()
    faults: dict[str, str] = {}

    @seed(number)
    @settings(
        max_examples=size,
        database=None,
        deadline=None,
        phases=[Phase.generate],
        suppress_health_check=list(HealthCheck),
    )
    @given(strategy)
    def every(case: Any) -> None:
        # Time of computing, which a busy machine does not stretch; waiting has ten times as long.
        signal.setitimer(signal.ITIMER_PROF, seconds)
        signal.alarm(10 * seconds)
        with memory_for(memory):
            what = outcome(use, case, work)
        signal.alarm(0)
        signal.setitimer(signal.ITIMER_PROF, 0)
        if what in ("read", "refused"):
            counts[what] += 1
        else:
            counts["fault"] += 1
            faults.setdefault(what.strip()[-400:], f"{what}\ncase: {case!r}"[:6000])

    gc.collect()
    warnings.simplefilter("error")
    every()
    report.write_text(json.dumps({"counts": counts, "faults": list(faults.values())}))
