"""Damaged files by the thousand: read, or refused with a reason, a place and a way out.

Each case is used under a memory and a time limit. The default suite runs a short slice of the same
strategies (``tests/house/test_damaged_files.py``).
"""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Any

import pytest
from damaged_files import (
    damaged_dictionaries,
    damaged_ledgers,
    damaged_niftis,
    damaged_protocols,
    damaged_tables,
)
from limits import MIB, campaign
from small_study import write_small_study
from using_files import (
    use_dictionary,
    use_ledger,
    use_nifti,
    use_protocol,
    use_table,
)

pytestmark = pytest.mark.slow

CAMPAIGNS: dict[str, tuple[Any, Any, int]] = {
    "scans": (damaged_niftis(), use_nifti, 10_000),
    "protocols": (damaged_protocols(), use_protocol, 10_000),
    "pattern files": (damaged_tables(), use_table, 2_000),
    "dictionaries": (damaged_dictionaries(), use_dictionary, 2_000),
    "ledgers": (damaged_ledgers(), use_ledger, 2_000),
}


@pytest.mark.parametrize("kind", CAMPAIGNS)
def test_damaged_files_are_read_or_refused(kind: str, tmp_path: Path) -> None:
    strategy, use, count = CAMPAIGNS[kind]
    if kind == "protocols":
        write_small_study(tmp_path, scans=1, shape=(20, 24, 16))
    # a scan or a plan that was read goes on to be worked on; reading itself has 64 MiB
    memory = (512 if kind in ("scans", "protocols") else 64) * MIB
    counts, faults = campaign(strategy, use, tmp_path, count=count, memory=memory)
    print(f"\n{kind}: {dict(counts)}", file=sys.stderr)
    (tmp_path / "faults.txt").write_text("\n\n".join(faults))
    heads = sorted({fault.split("\ncase: ")[0].splitlines()[-1][:200] for fault in faults})
    assert not faults, f"see {tmp_path}/faults.txt: {heads}"
