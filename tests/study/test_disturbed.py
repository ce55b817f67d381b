"""Scans that change, disks that fill, and what must never be written."""

import os
import subprocess
from pathlib import Path

import nibabel
import pytest
from small_study import AFFINE, PROTOCOL, small_object, write_small_study

from mrics.errors import MricsError
from mrics.report import run_study
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


@pytest.fixture
def small_disk(tmp_path: Path) -> Path:
    """A file system of 300 kB."""
    folder = tmp_path / "disk"
    folder.mkdir()
    made = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", "size=300k", "tmpfs", str(folder)], capture_output=True
    )
    if made.returncode:
        pytest.skip("needs the right to mount a small tmpfs")
    yield folder
    subprocess.run(["umount", str(folder)], check=True)


def test_a_full_disk_stops_cleanly_and_the_run_goes_on_when_there_is_room(
    small_disk: Path, tmp_path: Path
) -> None:
    text = PROTOCOL.replace("draws = 2", "draws = 3")
    protocol = write_small_study(tmp_path, scans=2, protocol=text)
    out = small_disk / "out"
    with pytest.raises(MricsError, match=r"No space left|disk is full"):
        run_alone(protocol, out)
    assert not [p for p in out.rglob("*") if p.name.startswith(".") and p.name != ".running"]
    subprocess.run(["mount", "-o", "remount,size=30m", str(small_disk)], check=True)
    kept: list[int] = []
    resumed = run_alone(protocol, out, progress=lambda done, *_: kept.append(done))
    whole = run_alone(protocol, tmp_path / "whole")
    assert resumed["units"] == whole["units"]


def test_nothing_private_is_written(tmp_path: Path) -> None:
    home = tmp_path / "Dr_Quillfeather" / "private"
    protocol = write_small_study(home, scans=0)
    for number in range(2):
        image = nibabel.Nifti1Image(small_object(number), AFFINE)
        for field in ("descrip", "aux_file", "intent_name", "db_name"):
            image.header[field] = b"Zebulon"
        extension = nibabel.nifti1.Nifti1Extension(6, b"Zebulon born 1950")
        image.header.extensions.append(extension)
        nibabel.save(image, home / f"object_{number}.nii.gz")
    markup = "<script>alert('Small')</script>"
    protocol.write_text(PROTOCOL.replace("Small object", markup))
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
    assert (tmp_path / "out" / LEDGER).is_file()
