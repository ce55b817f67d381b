"""What is done with a file that someone handed in, from reading it to its first use."""

from __future__ import annotations

from pathlib import Path

from damaged_files import LEDGER_KEYS
from limits import MIB, memory_for

from mrics.protocol import load_protocol
from mrics.recovery.dictionary.store import load_dictionary
from mrics.sampling import read_pattern
from mrics.scan import Axes, body_mask, read_scan, scan_sigma
from mrics.scan.fitness import inspect_fully
from mrics.study import plan_study
from mrics.study.ledger import LEDGER, Ledger


def use_nifti(content: bytes, folder: Path) -> None:
    path = folder / "scan.nii"
    path.write_bytes(content)
    with memory_for(64 * MIB):
        scan = read_scan(path)
    body_mask(scan.data)
    scan_sigma(scan)
    inspect_fully(scan, Axes())


def use_protocol(content: bytes, folder: Path) -> None:
    path = folder.parent / "protocol.toml"
    path.write_bytes(content)
    plan_study(load_protocol(path))


def use_table(case: tuple[str, bytes], folder: Path) -> None:
    ending, content = case
    path = folder / f"table{ending}"
    path.write_bytes(content)
    read_pattern(path)
    read_pattern(path, (24,))


def use_dictionary(content: bytes, folder: Path) -> None:
    path = folder / "dictionary.npz"
    path.write_bytes(content)
    load_dictionary(path)


def use_ledger(content: bytes, folder: Path) -> None:
    (folder / LEDGER).write_bytes(content)
    (folder / f"{LEDGER}-journal").unlink(missing_ok=True)
    with Ledger(folder) as ledger:
        for result in ledger.finished(LEDGER_KEYS).values():
            assert result["maps"] == []
            assert result["slices"][0]["nrmse"] is not None
        ledger.commit("another", {"maps": []})
