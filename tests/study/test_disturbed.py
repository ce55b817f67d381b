"""Scans that change, disks that fill, and what must never be written."""

import multiprocessing
import os
import shutil
import subprocess
from collections.abc import Iterator
from pathlib import Path

import nibabel
import pytest
from small_disk import mounted
from small_study import AFFINE, PROTOCOL, small_object, write_small_study

from mrics.errors import MricsError
from mrics.report import run_study, write_report
from mrics.study import run_study as run_alone
from mrics.study.ledger import LEDGER, Ledger


def test_a_scan_that_changes_during_the_run_stops_it_with_its_name(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=2)

    def disturb(done: int, total: int, label: str) -> None:
        if done == 1:
            nibabel.save(nibabel.Nifti1Image(small_object(9), AFFINE), tmp_path / "object_1.nii.gz")

    with pytest.raises(MricsError, match="changed while the study ran") as caught:
        run_alone(protocol, tmp_path / "out", progress=disturb)
    assert "object_1" in caught.value.where
    with Ledger(tmp_path / "out") as ledger:
        kept = ledger._base.execute("SELECT count(*) FROM units").fetchone()[0]
    assert kept == 5, "the units of the scan that stayed are kept"


def test_a_scan_that_vanishes_during_the_run_is_named(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=2)

    def disturb(done: int, total: int, label: str) -> None:
        if done == 1:
            (tmp_path / "object_1.nii.gz").unlink()

    with pytest.raises(MricsError) as caught:
        run_alone(protocol, tmp_path / "out", progress=disturb)
    assert "object_1.nii.gz" in str(caught.value)


def test_a_scan_that_changes_before_workers_start_stops_the_run(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=1)

    def disturb(done: int, total: int, label: str) -> None:
        nibabel.save(nibabel.Nifti1Image(small_object(9), AFFINE), tmp_path / "object_0.nii.gz")

    with pytest.raises(MricsError, match="changed while the study ran"):
        run_alone(protocol, tmp_path / "out", workers=2, progress=disturb)
    with Ledger(tmp_path / "out") as ledger:
        assert not ledger._base.execute("SELECT count(*) FROM units").fetchone()[0]


def test_a_lost_worker_stops_the_run_and_its_finished_units_are_kept(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=2)

    def kill(done: int, total: int, label: str) -> None:
        if label:
            for child in multiprocessing.active_children():
                child.kill()

    with pytest.raises(MricsError, match="ended from outside"):
        run_alone(protocol, tmp_path / "out", workers=2, progress=kill)
    assert not (tmp_path / "out" / "scratch").exists()
    counts: list[int] = []
    resumed = run_alone(protocol, tmp_path / "out", progress=lambda done, *_: counts.append(done))
    assert counts[0] >= 1
    assert resumed["units"] == run_alone(protocol, tmp_path / "whole")["units"]


@pytest.mark.parametrize("damage", ["stack.npy", "sums.json"])
def test_scratch_damaged_during_a_run_is_made_again(tmp_path: Path, damage: str) -> None:
    protocol = write_small_study(tmp_path, scans=2)
    out = tmp_path / "out"
    damaged: list[Path] = []

    def disturb(done: int, total: int, label: str) -> None:
        if label and not damaged:
            # Units come scan by scan, so no worker has opened the second one yet.
            damaged.append(out / "scratch" / "object-1" / damage)
            damaged[0].write_bytes(damaged[0].read_bytes()[:-7])

    results = run_alone(protocol, out, workers=2, progress=disturb)
    assert damaged
    assert results["units"] == run_alone(protocol, tmp_path / "whole")["units"]


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    with mounted(tmp_path / "disk") as folder:
        yield folder


@pytest.mark.parametrize("workers", [1, 2])
def test_a_full_disk_stops_cleanly_and_the_run_goes_on_when_there_is_room(
    small_disk: Path, tmp_path: Path, workers: int
) -> None:
    text = PROTOCOL.replace("draws = 2", "draws = 3")
    protocol = write_small_study(tmp_path, scans=2, protocol=text)
    out = small_disk / "out"
    with pytest.raises(MricsError, match=r"No space left|disk is full"):
        run_alone(protocol, out, workers=workers)
    assert not (out / "scratch").exists()
    assert not [p for p in out.rglob("*") if p.name.startswith(".") and p.name != ".running"]
    subprocess.run(["mount", "-o", "remount,size=30m", str(small_disk)], check=True)
    kept: list[int] = []
    resumed = run_alone(protocol, out, progress=lambda done, *_: kept.append(done))
    whole = run_alone(protocol, tmp_path / "whole")
    assert resumed["units"] == whole["units"]


def test_a_page_that_finds_no_room_leaves_nothing_half_written(
    small_disk: Path, tmp_path: Path
) -> None:
    subprocess.run(["mount", "-o", "remount,size=30m", str(small_disk)], check=True)
    out = small_disk / "out"
    run_alone(write_small_study(tmp_path, scans=1), out)
    room = shutil.disk_usage(small_disk).free
    (small_disk / "filler").write_bytes(b"\0" * (room - 50_000))
    with pytest.raises(MricsError, match=r"report\.html cannot be written"):
        write_report(out)
    assert not [p for p in out.rglob(".*") if p.name != ".running"]


def test_nothing_private_is_written(tmp_path: Path) -> None:
    home = tmp_path / "Dr_Quillfeather" / "private"
    protocol = write_small_study(home, scans=0)
    for number in range(2):
        image = nibabel.Nifti1Image(small_object(number), AFFINE)
        for field in ("descrip", "aux_file", "intent_name", "db_name"):
            image.header[field] = b"Zebulon"
        extension = nibabel.nifti1.Nifti1Extension(6, b"Zebulon born 1950")
        image.header.extensions.append(extension)
        nibabel.save(image, home / f"object_{number}<b>&'x.nii.gz")
    markup = "<script>alert('Small')</script>"
    text = PROTOCOL.replace("Small object", markup)
    protocol.write_text(text.replace('"object_', f'"{home}/object_'))
    run_study(protocol, tmp_path / "out", workers=2)
    user = os.environ.get("USER") or "no-user-name-here"
    planted = ("Zebulon", "Quillfeather", str(tmp_path), os.uname().nodename, user)
    for path in (p for p in (tmp_path / "out").rglob("*") if p.is_file()):
        content = path.read_bytes()
        if path.name.endswith(".nii.gz"):
            image = nibabel.load(path)
            content = image.header.binaryblock + b"".join(
                e.get_content() for e in image.header.extensions
            )
        for word in planted:
            if len(word) > 3 and word != "root":
                assert word.encode() not in content, f"{word!r} stands in {path.name}"
    page = (tmp_path / "out" / "report.html").read_text()
    assert markup not in page
    assert "&lt;script&gt;alert" in page
    assert "<b>&'x" not in page
    assert (tmp_path / "out" / LEDGER).is_file()
