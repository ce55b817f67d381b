"""Scan files: relative paths, patterns, pairs, order, and what is missing."""

from __future__ import annotations

import pytest
from texts import ANKLE_2D, changed

from mrics.errors import ProtocolError
from mrics.protocol import from_text, load_protocol

KNEES = ["knee_1.nii.gz", "knee_2.nii.gz", "knee_10.nii.gz"]
PAIRS = ["s1_mag.nii", "s1_ph.nii", "s2_mag.nii", "s2_ph.nii", "s1_re.nii", "s1_im.nii"]
NAMES = [*KNEES, *PAIRS, "sub/deep.nii", "[odd].nii"]


@pytest.fixture
def folder(tmp_path):
    for name in NAMES:
        path = tmp_path / "scans" / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(b"")
    (tmp_path / "protocols").mkdir()
    return tmp_path


def files(folder, scans: str):
    text = changed(ANKLE_2D, '"ankle.nii"', scans)
    path = folder / "protocols" / "p.toml"
    path.write_text(text, encoding="utf-8")
    return load_protocol(path).scan_files()


def names(found) -> list[str]:
    return [scan.path.name for scan in found]


def test_paths_are_relative_to_the_protocol_file(folder, monkeypatch):
    monkeypatch.chdir("/")
    (scan,) = files(folder, '"../scans/knee_1.nii.gz"')
    assert scan.path.samefile(folder / "scans" / "knee_1.nii.gz")
    assert scan.name == "knee_1"
    (scan,) = files(folder, f'"{folder}/scans/sub/deep.nii"')
    assert scan.name == "deep"


def test_patterns_are_in_natural_order(folder):
    found = files(folder, '["../scans/s1_re.nii", "../scans/knee_*.nii.gz"]')
    assert names(found) == ["s1_re.nii", "knee_1.nii.gz", "knee_2.nii.gz", "knee_10.nii.gz"]
    assert names(files(folder, '"../scans/**/deep.nii"')) == ["deep.nii"]


def test_a_name_with_brackets_is_a_name(folder):
    assert names(files(folder, '"../scans/[odd].nii"')) == ["[odd].nii"]
    assert names(files(folder, '"../scans/knee_[12].nii.gz"')) == [
        "knee_1.nii.gz",
        "knee_2.nii.gz",
    ]


def test_pairs(folder):
    found = files(
        folder,
        '[{ magnitude = "../scans/*_mag.nii", phase = "../scans/*_ph.nii" },'
        ' { real = "../scans/s1_re.nii", imaginary = "../scans/s1_im.nii" }]',
    )
    assert names(found) == ["s1_mag.nii", "s2_mag.nii", "s1_re.nii"]
    assert [scan.phase and scan.phase.name for scan in found] == ["s1_ph.nii", "s2_ph.nii", None]
    assert found[2].imaginary.name == "s1_im.nii"


@pytest.mark.parametrize(
    ("scans", "says", "place"),
    [
        ('["../scans/knee_1.nii.gz", "../scans/no.nii"]', "'../scans/no.nii' does not exist", "2"),
        ('"../scans/sub"', "is a folder", "1"),
        ('"../scans/x*.nii"', "matches no file", "1"),
        ('["../scans/s1_re.nii", "../scans/*_re.nii"]', "listed twice", "2"),
        ('"a\\u0000b"', "not a path", "1"),
    ],
)
def test_what_is_missing_is_named(folder, scans, says, place):
    with pytest.raises(ProtocolError, match=says) as caught:
        files(folder, scans)
    assert "p.toml, line 21" in caught.value.where
    assert f"study.scans[{place}]" in caught.value.where


def test_a_partner_that_is_missing_is_named(folder):
    (folder / "scans" / "s2_ph.nii").unlink()
    with pytest.raises(ProtocolError, match=r"s2_mag.nii has no partner") as caught:
        files(folder, '{ magnitude = "../scans/*_mag.nii", phase = "../scans/*_ph.nii" }')
    assert "study.scans[1].phase" in caught.value.where
    (folder / "scans" / "s2_mag.nii").unlink()
    (folder / "scans" / "s3_ph.nii").write_bytes(b"")
    with pytest.raises(ProtocolError, match=r"s3_ph.nii has no partner"):
        files(folder, '{ magnitude = "../scans/*_mag.nii", phase = "../scans/*_ph.nii" }')


def test_a_protocol_is_read_without_its_scans():
    assert from_text(ANKLE_2D).study.scans[0].path == "ankle.nii"
