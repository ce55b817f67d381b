"""The protocol written for new scans: what it takes from their headers, and that it is valid."""

from __future__ import annotations

import nibabel as nib
import numpy as np
import pytest

from mrics.errors import ProtocolError, ScanError
from mrics.protocol import from_text, load_protocol, new_protocol, scan_time
from mrics.sampling import draw_entry


def write(path, shape, voxel, **dim_info):
    data = np.random.default_rng(0).normal(100, 10, shape).astype(np.float32)
    image = nib.Nifti1Image(data, np.diag([*voxel, 1.0]))
    if dim_info:
        image.header.set_dim_info(**dim_info)
    path.parent.mkdir(parents=True, exist_ok=True)
    nib.save(image, path)
    return path


def fresh(tmp_path, *scans):
    out = tmp_path / "protocols" / "new.toml"
    out.parent.mkdir(exist_ok=True)
    out.write_text(new_protocol(scans, out=out), encoding="utf-8")
    return load_protocol(out)


def test_a_3d_scan(tmp_path):
    scan = write(tmp_path / "knee.nii.gz", (96, 80, 40), (1.0, 1.0, 1.2))
    protocol = fresh(tmp_path, scan)
    assert protocol.sequence.family == "gradient-echo-3d"
    assert (protocol.axes().readout, protocol.axes().phase) == ("i", "j")
    assert protocol.axes().partition == "k"
    assert (protocol.grid.phase_steps, protocol.grid.partition_steps) == (80, 40)
    assert protocol.scan_files()[0].path.samefile(scan)


def test_a_2d_scan_phase_along_the_short_side(tmp_path):
    scan = write(tmp_path / "ankle.nii.gz", (80, 96, 9), (0.8, 0.8, 4.0))
    protocol = fresh(tmp_path, scan)
    assert protocol.sequence.family == "turbo-spin-echo-2d"
    assert (protocol.axes().readout, protocol.axes().phase) == ("j", "i")
    assert protocol.grid.phase_steps == 80
    assert protocol.grid.slices == 9


def test_a_sagittal_scan_with_thick_first_axis(tmp_path):
    scan = write(tmp_path / "sag.nii.gz", (7, 64, 64), (5.0, 0.7, 0.7))
    protocol = fresh(tmp_path, scan)
    assert protocol.axes().plane == "i"
    assert protocol.grid.slices == 7


def test_the_header_knows_the_axes(tmp_path):
    scan = write(tmp_path / "a.nii.gz", (64, 48, 9), (1, 1, 4), freq=1, phase=0, slice=2)
    protocol = fresh(tmp_path, scan)
    assert (protocol.axes().readout, protocol.axes().phase) == ("j", "i")
    assert "the header names the axes" in protocol.text


@pytest.mark.parametrize("shape", [(96, 80, 40), (33, 31, 17), (64, 48, 5), (16, 12, 3), (5, 4, 2)])
def test_every_arm_of_it_can_be_planned(tmp_path, shape):
    scan = write(tmp_path / "a.nii", shape, (1.0, 1.0, 1.1))
    protocol = fresh(tmp_path, scan)
    grid = (protocol.grid.phase_steps, protocol.grid.partition_steps)
    if not protocol.sequence.three_d:
        grid = grid[:1]
    for arm in protocol.arms():
        pattern = draw_entry(arm.sampling, grid, arm.acceleration, 1)
        timing = scan_time(protocol, pattern, arm=arm)
        assert timing.scan_time_s <= timing.full_scan_time_s


def test_pairs_frames_and_odd_names(tmp_path):
    folder = tmp_path / 'scans "ä'
    for name in ("s1_mag.nii", "s1_ph.nii", "sub-1_part-real_T1w.nii", "sub-1_part-imag_T1w.nii"):
        write(folder / name, (16, 16, 4), (1, 1, 3))
    frames = write(folder / "time series.nii", (16, 16, 4, 6), (1, 1, 3))
    protocol = fresh(tmp_path, *sorted(folder.iterdir()))
    found = protocol.scan_files()
    assert [
        (f.path.name, f.phase and f.phase.name, f.imaginary and f.imaginary.name) for f in found
    ] == [
        ("s1_mag.nii", "s1_ph.nii", None),
        ("sub-1_part-real_T1w.nii", None, "sub-1_part-imag_T1w.nii"),
        ("time series.nii", None, None),
    ]
    assert fresh(tmp_path, frames).sequence.frames == 6


def test_a_lone_magnitude_file_is_a_scan(tmp_path):
    scan = write(tmp_path / "s1_mag.nii", (16, 16, 4), (1, 1, 3))
    assert fresh(tmp_path, scan).scan_files()[0].phase is None


def test_every_key_has_a_comment(tmp_path):
    scan = write(tmp_path / "knee.nii.gz", (96, 80, 40), (1.0, 1.0, 1.2))
    text = fresh(tmp_path, scan).text
    assert text.isascii()
    for line in text.splitlines():
        bare = line.split("#")[0].strip()
        # Axis letters stand under one comment, names and paths speak for themselves.
        if bare and "=" in bare and not bare.startswith(("readout", "phase_a", "partition_a")):
            assert "#" in line or bare.startswith(("name", "exponent", "draw ", "law"))


def test_bad_input(tmp_path):
    with pytest.raises(ProtocolError, match="No scans are given"):
        new_protocol([])
    with pytest.raises(ScanError, match=r"nothing\.nii"):
        new_protocol([tmp_path / "nothing.nii"])


def test_the_measures_it_offers_are_valid(tmp_path):
    scan = write(tmp_path / "knee.nii.gz", (96, 80, 40), (1.0, 1.0, 1.2))
    text = new_protocol([scan], out=tmp_path / "new.toml")
    assert from_text(text).measures() is None
    lines = text.splitlines()
    first = next(n for n, line in enumerate(lines) if line.startswith("# ssim_margin"))
    offered = [line.removeprefix("# ") for line in lines[first:] if line.startswith("# ")]
    rest = [line for line in lines if not line.startswith("# ")]
    at = rest.index(next(line for line in rest if line.startswith("ssim_worst"))) + 1
    protocol = from_text("\n".join([*rest[:at], *offered, *rest[at:]]), tmp_path / "new.toml")
    measures = protocol.measures()
    assert protocol.baseline == "full"
    assert measures.labels == ("labels.nii.gz",)
    assert measures.noise_replicas == 40
    assert len(measures.features) == 6
    # 1 + 40 + 4 + 6 + 100 recoveries of two slices.
    assert measures.recoveries == 151
    assert protocol.arms()[-1].full_scan
