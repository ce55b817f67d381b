"""Damaged files, a short slice; ``tests/campaigns/test_fuzzing.py`` has them by the thousand."""

from pathlib import Path
from typing import Any

import pytest
from damaged_files import (
    LEDGER_KEYS,
    damaged_dictionaries,
    damaged_ledgers,
    damaged_niftis,
    damaged_protocols,
    damaged_tables,
    dictionary,
    ledger,
    nifti_files,
    protocols,
    tables,
)
from hypothesis import HealthCheck, Phase, given, settings
from limits import MIB, campaign
from small_study import write_small_study
from using_files import use_dictionary, use_ledger, use_nifti, use_protocol, use_table

from mrics.protocol import from_text
from mrics.recovery.dictionary.store import load_dictionary
from mrics.sampling import read_pattern
from mrics.scan import read_scan
from mrics.study.ledger import LEDGER, Ledger

SLICES: dict[str, tuple[Any, Any, int]] = {
    "scans": (damaged_niftis(), use_nifti, 60),
    "protocols": (damaged_protocols(), use_protocol, 80),
    "pattern files": (damaged_tables(), use_table, 80),
    "dictionaries": (damaged_dictionaries(), use_dictionary, 60),
    "ledgers": (damaged_ledgers(), use_ledger, 40),
}


@pytest.mark.parametrize("kind", SLICES)
def test_damaged_files_are_read_or_refused(kind: str, tmp_path: Path) -> None:
    strategy, use, count = SLICES[kind]
    if kind == "protocols":
        write_small_study(tmp_path, scans=1, shape=(20, 24, 16))
    memory = (512 if kind in ("scans", "protocols") else 64) * MIB
    counts, faults = campaign(strategy, use, tmp_path, count=count, memory=memory)
    assert not faults, "\n\n".join(faults)
    assert counts["refused"] > 0


few = settings(
    max_examples=25,
    deadline=None,
    derandomize=True,
    database=None,
    phases=[Phase.generate],
    suppress_health_check=list(HealthCheck),
)


@few
@given(nifti_files())
def test_valid_scans_are_read(tmp_path_factory: pytest.TempPathFactory, content: bytes) -> None:
    path = tmp_path_factory.mktemp("scan") / "scan.nii"
    path.write_bytes(content)
    assert read_scan(path).data.size > 0


@few
@given(protocols())
def test_valid_protocols_are_read(text: str) -> None:
    assert from_text(text).arms()


def test_undamaged_files_are_read(tmp_path: Path) -> None:
    for ending, content in tables():
        path = tmp_path / f"table{ending}"
        path.write_bytes(content)
        assert read_pattern(path).acquired > 0
    (tmp_path / "d.npz").write_bytes(dictionary())
    assert load_dictionary(tmp_path / "d.npz").atoms.shape == (24, 16)
    (tmp_path / LEDGER).write_bytes(ledger())
    with Ledger(tmp_path) as kept:
        assert len(kept.finished(LEDGER_KEYS)) == len(LEDGER_KEYS)
