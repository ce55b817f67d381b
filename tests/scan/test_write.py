"""Writing NIfTI: grid kept, text blanked, atomic, same bytes."""

from __future__ import annotations

import gzip
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from nifti_files import blob, nifti_bytes, save, write
from open_volumes import open_volume

from mrics.errors import ScanError
from mrics.scan import Scan, read_scan, write_nifti


@pytest.mark.parametrize("ending", ["nii", "nii.gz"])
@pytest.mark.parametrize("kind", ["float32", "complex64", "complex128", "bool", "int16"])
def test_round_trip(tmp_path: Path, kind: str, ending: str) -> None:
    rng = np.random.default_rng(0)
    scan = read_scan(save(tmp_path / "in.nii", blob((5, 6, 7)).astype(np.float32), _oblique()))
    values = rng.standard_normal((5, 6, 7, 2)) * 100
    data = (values > 0) if kind == "bool" else values.astype(kind)
    path = write_nifti(tmp_path / f"out.{ending}", data, scan)
    image = nib.load(path)
    np.testing.assert_array_equal(np.asanyarray(image.dataobj), data)
    np.testing.assert_allclose(image.affine, scan.affine, atol=1e-5)
    assert image.header["descrip"].tobytes().rstrip(b"\0") == b"mrics research only"
    assert image.header.get_xyzt_units()[0] == "mm"
    assert [p.name for p in tmp_path.iterdir() if p.name.endswith(".part")] == []


def _oblique() -> np.ndarray:
    angle = 0.3
    turn = np.array(
        [[np.cos(angle), -np.sin(angle), 0], [np.sin(angle), np.cos(angle), 0], [0, 0, 1]]
    )
    affine = np.eye(4)
    affine[:3, :3] = turn * [0.5, 0.6, 2.0]
    affine[:3, 3] = [-10, 20, 30]
    return affine


@pytest.mark.parametrize("identity", ["A", "B", "G"])
def test_open_volumes_keep_their_grid(tmp_path: Path, identity: str) -> None:
    source = open_volume(identity)
    scan = read_scan(source)
    again = read_scan(write_nifti(tmp_path / "out.nii.gz", scan.data, scan))
    original = nib.load(source)
    np.testing.assert_array_equal(again.data, scan.data)
    np.testing.assert_allclose(again.affine, original.affine, atol=1e-4)
    np.testing.assert_allclose(again.voxel_mm, original.header.get_zooms()[:3], rtol=1e-6)
    header = nib.load(tmp_path / "out.nii.gz").header
    for code in ("sform_code", "qform_code"):
        if original.header["sform_code"] or original.header["qform_code"]:
            assert header[code] == original.header[code]


def test_free_text_is_left_behind(tmp_path: Path) -> None:
    content = bytearray(nifti_bytes(np.ones((3, 4, 5), np.int16), 4, quaternion=(0, 0, 0)))
    for at, size in ((4, 10), (14, 18), (148, 80), (228, 24), (328, 16)):
        content[at : at + size] = (b"PLANTEDNAME" * 8)[:size]
    scan = read_scan(write(tmp_path / "in.nii", bytes(content)))
    path = write_nifti(tmp_path / "out.nii", scan.data, scan)
    assert b"PLANTED" not in path.read_bytes()
    assert b"TEDNAME" not in path.read_bytes()


def test_same_data_same_bytes_and_no_name_in_the_gzip_header(tmp_path: Path) -> None:
    scan = read_scan(open_volume("B"))
    one = write_nifti(tmp_path / "one.nii.gz", scan.data, scan).read_bytes()
    two = write_nifti(tmp_path / "two.nii.gz", scan.data, scan).read_bytes()
    assert one == two
    assert one[3] == 0  # flags: no name (RFC 1952)
    assert one[4:8] == bytes(4)  # no time
    assert len(gzip.decompress(one)) == 352 + 4 * scan.data.size


def test_micrometre_scan_is_written_in_mm(tmp_path: Path) -> None:
    content = nifti_bytes(np.ones((3, 4, 5), np.int16), 4, units=3, quaternion=(0, 0, 0))
    scan = read_scan(write(tmp_path / "um.nii", content))
    again = read_scan(write_nifti(tmp_path / "mm.nii", scan.data, scan))
    np.testing.assert_allclose(again.voxel_mm, (0.001, 0.002, 0.003), rtol=1e-6)
    np.testing.assert_allclose(again.affine, scan.affine, rtol=1e-6)


def test_refusals(tmp_path: Path) -> None:
    scan = Scan(data=np.ones((3, 4, 5), np.float32), affine=np.eye(4), voxel_mm=(1, 1, 1))
    with pytest.raises(ScanError, match=r"name 'out.img' has another ending"):
        write_nifti(tmp_path / "out.img", scan.data, scan)
    with pytest.raises(ScanError, match=r"shape \(3, 4, 6\), the scan it is written for"):
        write_nifti(tmp_path / "out.nii", np.ones((3, 4, 6)), scan)
    with pytest.raises(ScanError, match=r"cannot be written .No such file or directory"):
        write_nifti(tmp_path / "nowhere" / "out.nii", scan.data, scan)
    assert list(tmp_path.iterdir()) == []


def test_a_failed_write_leaves_the_old_file(tmp_path: Path) -> None:
    scan = Scan(data=np.ones((3, 4, 5), np.float32), affine=np.eye(4), voxel_mm=(1, 1, 1))
    path = write_nifti(tmp_path / "out.nii", scan.data, scan)
    before = path.read_bytes()

    class Failing(np.ndarray):
        def tobytes(self, order: str | None = "C") -> bytes:  # type: ignore[override]
            raise OSError(28, "No space left on device")

    with pytest.raises(ScanError, match="No space left"):
        write_nifti(path, scan.data.view(Failing), scan)
    assert path.read_bytes() == before
    assert [p.name for p in tmp_path.iterdir()] == ["out.nii"]
