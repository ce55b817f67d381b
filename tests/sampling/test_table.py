"""Sampling tables and masks: exact round trips, masks made elsewhere, refusals."""

import csv
import json
from dataclasses import replace

import nibabel as nib
import numpy as np
import pytest

from mrics.errors import PatternError
from mrics.sampling import (
    DRAWS,
    draw_entry,
    draw_pattern,
    law_quanta,
    read_pattern,
    redraw,
    write_table,
)
from mrics.sampling.masks import central_block

ENTRIES = [
    {"law": "power", "calibration": 8},
    {"law": "gaussian", "draw": "bernoulli", "elliptical": True, "partial_fourier": 0.75},
    {"draw": "poisson-disc", "calibration": 6, "best_of": 2},
    {"pattern": "shifted lattice", "steps": [2, 2], "shift": 1, "calibration": 8},
    {"pattern": "spokes", "calibration": 0},
    {"pattern": "spiral", "calibration": 6, "turns": 1.5},
]


def same(a, b):
    return (
        (a.mask == b.mask).all()
        and a.frames == b.frames
        and a.calibration == b.calibration
        and a.hash == b.hash
        and ((a.order is None and b.order is None) or (a.order == b.order).all())
    )


@pytest.mark.parametrize("suffix", [".csv", ".json"])
@pytest.mark.parametrize("frames", [0, 3])
@pytest.mark.parametrize("entry", ENTRIES)
def test_tables_read_back_exactly(tmp_path, entry, frames, suffix):
    pattern = draw_entry(entry, (48, 33), 4, seed=3, frames=frames)
    path = write_table(pattern, tmp_path / f"table{suffix}")
    assert same(pattern, read_pattern(path))
    assert same(pattern, read_pattern(path, (48, 33)))
    assert [p.name for p in tmp_path.iterdir()] == [path.name]


@pytest.mark.parametrize("suffix", [".csv", ".json", ".nii", ".nii.gz"])
def test_one_dimensional_patterns_read_back(tmp_path, suffix):
    pattern = draw_pattern((65,), calibration=9, seed=1)
    again = read_pattern(write_table(pattern, tmp_path / f"lines{suffix}"))
    assert again.grid == (65,)
    assert (again.mask == pattern.mask).all()


@pytest.mark.parametrize("frames", [0, 4])
def test_masks_read_back_exactly(tmp_path, frames):
    pattern = draw_pattern((48, 33), seed=3, calibration=8, frames=frames)
    again = read_pattern(write_table(pattern, tmp_path / "mask.nii.gz"))
    assert again.frames == frames
    assert (again.mask == pattern.mask).all()
    image = nib.load(tmp_path / "mask.nii.gz")
    assert image.header["descrip"].item() == b"mrics research only"
    assert image.shape[:3] == (48, 33, 1)


def test_columns_count_from_zero_and_from_the_centre(tmp_path):
    pattern = draw_pattern((48, 33), pattern="spokes", calibration=0, acceleration=6)
    write_table(pattern, tmp_path / "table.csv")
    lines = [x for x in (tmp_path / "table.csv").read_text().splitlines() if x[0] != "#"]
    table = list(csv.DictReader(lines))
    assert len(table) == pattern.mask.sum()
    played = [(int(row["shot"]), int(row["echo"])) for row in table]
    assert played == sorted(played)
    for row in table:
        assert pattern.mask[int(row["phase"]), int(row["partition"])]
        assert int(row["phase_from_centre"]) == int(row["phase"]) - 24
        assert int(row["partition_from_centre"]) == int(row["partition"]) - 16
        assert row["frame"] == "0"
    head = (tmp_path / "table.csv").read_text()
    assert pattern.hash in head
    assert "not for diagnosis" in head


@pytest.mark.parametrize("draw", DRAWS)
@pytest.mark.parametrize("frames", [0, 2])
def test_json_holds_what_is_needed_to_draw_again(tmp_path, draw, frames):
    settings = {"draw": draw, "elliptical": True, "partial_fourier": (0.8, 1), "best_of": 2}
    entry = {"law": "gaussian", "width": 0.4, "calibration": 6, **settings}
    pattern = draw_entry(entry, (48, 33), 3.5, 11, frames=frames, identity=("draw", 4))
    stored = json.loads(write_table(pattern, tmp_path / "t.json").read_text())
    again = redraw(stored["settings"])
    assert again.hash == pattern.hash == stored["hash"]
    np.testing.assert_array_equal(again.probability, pattern.probability)
    assert stored["mrics"]


def test_laws_from_files_are_drawn_again_without_them(tmp_path):
    density = np.random.default_rng(0).random((48, 33))
    np.save(tmp_path / "law.npy", density)
    entry = {"law": "table", "table": str(tmp_path / "law.npy"), "calibration": 6}
    pattern = draw_entry(entry, (48, 33), 4, seed=2)
    path = write_table(pattern, tmp_path / "t.json")
    (tmp_path / "law.npy").unlink()
    stored = json.loads(path.read_text())
    assert redraw(stored["settings"], law_quanta(path)).hash == pattern.hash
    plain = write_table(draw_pattern((48, 33), calibration=6), tmp_path / "plain.json")
    assert law_quanta(plain) is None


def test_a_mask_made_elsewhere_can_be_studied(tmp_path):
    mask = np.zeros((40, 30), dtype=np.uint8)
    mask[::4] = 1
    mask[14:26, 10:20] = 1
    nib.save(nib.Nifti1Image(mask, np.eye(4)), tmp_path / "mask.nii")
    pattern = draw_entry({"pattern": "file", "file": str(tmp_path / "mask.nii")}, (40, 30))
    assert (pattern.mask == mask).all()
    assert pattern.calibration == (12, 10)
    assert pattern.acceleration == pytest.approx(1200 / mask.sum())
    repeated = draw_entry(
        {"pattern": "file", "file": str(tmp_path / "mask.nii")}, (40, 30), frames=2
    )
    assert repeated.mask.shape == (2, 40, 30)
    # the same mask at every readout position, readout first
    nib.save(nib.Nifti1Image(np.repeat(mask[None], 5, 0), np.eye(4)), tmp_path / "full.nii")
    assert (read_pattern(tmp_path / "full.nii", (40, 30)).mask == mask).all()


def test_a_plain_csv_made_elsewhere(tmp_path):
    (tmp_path / "t.csv").write_text("phase,partition\n3,4\n0,1\n")
    pattern = read_pattern(tmp_path / "t.csv", (8, 6))
    assert pattern.order is None
    assert sorted(map(tuple, np.argwhere(pattern.mask).tolist())) == [(0, 1), (3, 4)]


def test_a_fully_sampled_mask_is_allowed_and_said(tmp_path):
    nib.save(nib.Nifti1Image(np.ones((8, 6), np.uint8), np.eye(4)), tmp_path / "m.nii")
    pattern = read_pattern(tmp_path / "m.nii")
    assert pattern.acceleration == 1
    assert pattern.settings["note"] == "fully sampled mask: R = 1"


@pytest.mark.parametrize(
    ("values", "shape", "message"),
    [
        (np.full((8, 6), 0.5), None, "holds the value 0.5, not only 0 and 1"),
        (np.full((8, 6), np.nan), None, "48 of 48 voxels are NaN"),
        (np.zeros((8, 6)), None, "acquires no position"),
        (np.ones((8, 6)), (6, 8), r"shape \(8, 6\), the grid is \(6, 8\)"),
        (np.arange(48).reshape(8, 6) % 2, (8,), r"shape \(8, 6\), the grid is \(8,\)"),
        (np.ones((8, 6, 4)), None, "no .phase, partition. image"),
    ],
)
def test_unusable_masks_are_refused(tmp_path, values, shape, message):
    image = nib.Nifti1Image(values.astype(np.float32), np.eye(4))
    nib.save(image, tmp_path / "mask.nii")
    with pytest.raises(PatternError, match=message):
        read_pattern(tmp_path / "mask.nii", shape)


def test_a_frame_without_positions_is_refused(tmp_path):
    mask = np.ones((8, 6, 1, 3), np.uint8)
    mask[..., 1] = 0
    nib.save(nib.Nifti1Image(mask, np.eye(4)), tmp_path / "mask.nii")
    with pytest.raises(PatternError, match=r"no position in one of its frames(.|\n)*frame 1"):
        read_pattern(tmp_path / "mask.nii")


@pytest.mark.parametrize(
    ("name", "text", "message"),
    [
        ("t.csv", "phase,partition\n9,0\n", "phase index 9 is outside 0 ... 7"),
        ("t.csv", "phase,partition\n1,x\n", "not whole numbers"),
        ("t.csv", "phase,partition\n1,1\n1,1\n", r"position \(1, 1\) is listed more than once"),
        ("t.csv", "line\n1\n", "no positions in a column 'phase'"),
        ("t.csv", "", "no positions in a column 'phase'"),
        ("t.csv", "# grid: 8 7\nphase,partition\n1,1\n", r"grid \(8, 7\), not \(8, 6\)"),
        ("t.json", "{", "is not JSON"),
        ("t.json", "[]", "holds no sampling table"),
        ("t.nii", "no image", "not a NIfTI image"),
        ("t.txt", "", "unknown ending"),
    ],
)
def test_unusable_tables_are_refused(tmp_path, name, text, message):
    (tmp_path / name).write_text(text)
    with pytest.raises(PatternError, match=message):
        read_pattern(tmp_path / name, (8, 6))


def test_missing_files_and_folders(tmp_path):
    with pytest.raises(PatternError, match="does not exist"):
        read_pattern(tmp_path / "none.csv")
    pattern = draw_pattern((48,), calibration=8)
    for name in ("t.csv", "t.nii"):
        with pytest.raises(PatternError, match="cannot be written"):
            write_table(pattern, tmp_path / "nowhere" / name)
    (tmp_path / "t.csv").write_text("phase\n1\n")
    with pytest.raises(PatternError, match="does not say how large its grid is"):
        read_pattern(tmp_path / "t.csv")


def test_file_entries_check_acceleration_and_frames(tmp_path):
    pattern = draw_pattern((48,), calibration=8, frames=2)
    path = write_table(pattern, tmp_path / "t.json")
    entry = {"pattern": "file", "file": str(path)}
    assert same(draw_entry(entry, (48,), frames=2), pattern)
    with pytest.raises(PatternError, match="acceleration 4, not 6"):
        draw_entry(entry, (48,), 6, frames=2)
    with pytest.raises(PatternError, match="has 2 frames, the scan 1"):
        draw_entry(entry, (48,))
    with pytest.raises(PatternError, match="needs the key 'file'"):
        draw_entry({"pattern": "file"}, (48,))


def test_order_takes_part_in_the_round_trip(tmp_path):
    pattern = draw_pattern((48, 33), calibration=8, seed=3)
    count = int(pattern.mask.sum())
    shuffled = np.random.default_rng(0).permutation(count)
    order = np.stack([shuffled // 12, shuffled % 12], axis=1)
    ordered = replace(pattern, order=order)
    assert ordered.hash != pattern.hash
    for name in ("t.csv", "t.json"):
        assert same(read_pattern(write_table(ordered, tmp_path / name)), ordered)


def test_central_block_of_a_mask():
    mask = np.zeros((32, 32), dtype=bool)
    mask[12:20, 8:24] = True
    assert central_block(mask) == (8, 16)
    mask[16, 16] = False
    assert central_block(mask) == (0, 0)
    assert central_block(np.arange(32) % 2 == 0) == (0,)
