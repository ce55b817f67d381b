"""Files that cannot be used: each is refused with what, where and a way out."""

from __future__ import annotations

import gzip
import re
import tracemalloc
from collections.abc import Callable
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from limits import MIB, memory_for
from nifti_files import blob, nifti_bytes, save, write

from mrics.errors import ScanError
from mrics.numerics.memory import available_memory
from mrics.scan import read_header, read_scan

ONES = np.ones((4, 5, 6), np.int16)


def _random_zip(tmp_path: Path) -> bytes:
    values = np.random.default_rng(0).integers(1, 4000, (16, 16, 16)).astype(np.int16)
    path = write(tmp_path / "whole.nii.gz", nifti_bytes(values, 4))
    return path.read_bytes()


def _truncated(tmp_path: Path) -> bytes:
    return _random_zip(tmp_path)[:-2000]


def _without_checksum(tmp_path: Path) -> bytes:
    return _random_zip(tmp_path)[:-4]


def _flipped(tmp_path: Path) -> bytes:
    content = bytearray(_random_zip(tmp_path))
    content[len(content) // 2] ^= 0xFF
    return bytes(content)


def _header_with(at: int, value: bytes) -> Callable[[Path], bytes]:
    def make(_: Path) -> bytes:
        content = bytearray(nifti_bytes(ONES, 4, quaternion=(0, 0, 0)))
        content[at : at + len(value)] = value
        return bytes(content)

    return make


def _nan(_: Path) -> bytes:
    values = np.ones((4, 5, 6), np.float32)
    values[3, 2, 1] = np.nan
    values[0, 0, 2] = np.inf
    return nifti_bytes(values, 16)


def _i2(n: int) -> bytes:
    return np.int16(n).tobytes()


def _f4(x: float) -> bytes:
    return np.float32(x).tobytes()


BAD: dict[str, tuple[Callable[[Path], bytes], str]] = {
    "truncated gzip": (_truncated, "truncated or damaged.*120|truncated or damaged"),
    "gzip without its checksum": (_without_checksum, "truncated or damaged"),
    "gzip with a flipped byte": (_flipped, "truncated or damaged"),
    "gzip cut in the header": (lambda t: _random_zip(t)[:40], "truncated or damaged"),
    "truncated plain": (
        lambda _: nifti_bytes(ONES, 4)[:-7],
        r"claims 4 x 5 x 6 values of 2 bytes \(592 bytes in all\), but the file holds 585",
    ),
    "text": (lambda _: b"not an image at all " * 40, "not a NIfTI image .*b'not an i'"),
    "empty": (lambda _: b"", "not a NIfTI image .an empty file"),
    "header of a pair": (_header_with(344, b"ni1\0"), "two-file NIfTI pair"),
    "2-D": (lambda _: nifti_bytes(ONES[:, :, 0], 4), "2-D .shape 4 x 5."),
    "5-D": (
        lambda _: nifti_bytes(np.ones((2, 2, 2, 2, 3), np.int16), 4),
        "5-D .shape 2 x 2 x 2 x 2 x 3.",
    ),
    "NaN and Inf": (_nan, r"2 of 120 voxels are NaN, infinite.*\n.*first at index \(3, 2, 1\)"),
    "beyond float32": (
        lambda _: nifti_bytes(np.full((2, 2, 2), 1e200), 64),
        "8 of 8 voxels are NaN, infinite or beyond single precision",
    ),
    "all zero": (lambda _: nifti_bytes(ONES * 0, 4), "Every voxel of the volume is zero"),
    "sizeof_hdr": (_header_with(0, _i2(300)), "sizeof_hdr is 300, it must be 348"),
    "dim[0] of 9": (_header_with(40, _i2(9)), r"dim\[0\] is 9"),
    "negative axis": (_header_with(44, _i2(-5)), "must all be at least 1"),
    "colour": (_header_with(70, _i2(128)), "no numbers .datatype code 128"),
    "unknown type": (_header_with(70, _i2(77)), "datatype code 77 is unknown"),
    "voxel size 0": (_header_with(84, _f4(0)), "voxel size along j is 0 mm"),
    "voxel size NaN": (_header_with(80, _f4(np.nan)), "voxel size along i is nan mm"),
    "data far away": (_header_with(108, _f4(1e15)), "start at byte 1e.15"),
    "data inside the header": (_header_with(108, _f4(100)), "start at byte 100"),
    "slope without intercept": (
        _header_with(112, _f4(2.0) + _f4(np.nan)),
        "scl_slope is 2 but scl_inter is nan",
    ),
    "unknown units": (_header_with(123, b"\x05"), "unknown space unit 5"),
    "no rotation": (_header_with(256, _f4(3.0)), "orientation cannot be read"),
    "singular sform": (_header_with(254, _i2(1)), "singular or not finite"),
}


@pytest.mark.parametrize("case", sorted(BAD))
def test_bad_file(tmp_path: Path, case: str) -> None:
    make, message = BAD[case]
    path = tmp_path / "bad.nii"
    path.write_bytes(make(tmp_path))
    with pytest.raises(ScanError, match=message) as caught:
        read_scan(path)
    assert str(path) in caught.value.where
    assert caught.value.fix


def test_missing_file_and_folder(tmp_path: Path) -> None:
    with pytest.raises(ScanError, match="no such file"):
        read_scan(tmp_path / "nothing.nii.gz")
    with pytest.raises(ScanError, match="a folder, not a scan"):
        read_header(tmp_path)


@pytest.mark.parametrize("ending", ["nii", "nii.gz"])
def test_absurd_size_is_refused_before_memory_is_asked_for(tmp_path: Path, ending: str) -> None:
    content = nifti_bytes(ONES, 4, dims=(32000, 32000, 32000))
    path = write(tmp_path / f"huge.{ending}", content)
    tracemalloc.start()
    with pytest.raises(ScanError, match=r"32000 x 32000 x 32000 values .*but the file holds"):
        read_scan(path)
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert peak < 4 * 2**20


def test_honest_size_beyond_memory_is_refused(tmp_path: Path) -> None:
    side = 2000
    depth = available_memory() // (4 * side**2) + 1
    path = tmp_path / "sparse.nii"
    path.write_bytes(nifti_bytes(ONES, 4, dims=(side, side, depth))[:352])
    with path.open("r+b") as stream:
        stream.truncate(352 + 2 * side * side * depth)
    with pytest.raises(ScanError, match="GiB in memory"):
        read_scan(path)


def test_gzip_bomb_with_an_honest_header_is_refused_by_size(tmp_path: Path) -> None:
    member = gzip.compress(bytes(64 * 2**20))
    side = 2000
    depth = available_memory() // (4 * side**2) + 1
    head = nifti_bytes(ONES, 4, dims=(side, side, depth))[:352]
    path = tmp_path / "bomb.nii.gz"
    with path.open("wb") as stream:
        stream.write(gzip.compress(head))
        for _ in range(2 * side * side * depth // (64 * 2**20) + 1):
            stream.write(member)
    with pytest.raises(ScanError, match="GiB in memory"):
        read_scan(path)


def test_gzip_bomb_behind_a_small_image_is_not_unpacked(tmp_path: Path) -> None:
    path = tmp_path / "bomb.nii.gz"
    member = gzip.compress(bytes(64 * 2**20))
    path.write_bytes(gzip.compress(nifti_bytes(ONES, 4)) + member * 200)
    tracemalloc.start()
    with pytest.raises(ScanError, match="far more bytes than its header claims"):
        read_scan(path)
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert peak < 16 * 2**20


def test_analyze_pair_and_other_formats(tmp_path: Path) -> None:
    nib.save(nib.Spm99AnalyzeImage(ONES, np.eye(4)), tmp_path / "old.img")
    with pytest.raises(ScanError, match="not a NIfTI image"):
        read_scan(tmp_path / "old.hdr")


def test_pairs_that_do_not_fit(tmp_path: Path) -> None:
    magnitude = save(tmp_path / "m.nii", blob().astype(np.float32))
    zeros = np.zeros((24, 20, 18), np.float32)
    other_shape = save(tmp_path / "shape.nii", zeros[:-1])
    moved = np.eye(4)
    moved[0, 3] = 0.5
    elsewhere = save(tmp_path / "moved.nii", zeros, moved)
    phase = save(tmp_path / "p.nii", zeros)
    complex_file = save(tmp_path / "c.nii", blob().astype(np.complex64))
    message = re.escape("phase file has shape (23, 20, 18), the scan (24, 20, 18)")
    with pytest.raises(ScanError, match=message):
        read_scan(magnitude, other_shape)
    with pytest.raises(ScanError, match=r"phase file lies elsewhere.*up to 0.5 mm"):
        read_scan(magnitude, elsewhere)
    with pytest.raises(ScanError, match="imaginary file has shape"):
        read_scan(magnitude, imaginary=other_shape)
    with pytest.raises(ScanError, match="both given"):
        read_scan(magnitude, phase, imaginary=phase)
    with pytest.raises(ScanError, match="complex already"):
        read_scan(complex_file, phase)


@pytest.mark.parametrize(
    ("low", "high", "whole"),
    [(-10, 10, False), (-2, 5, False), (0, 3000, True), (-3000, 3000, True), (-100, 4095, True)],
)
def test_phase_outside_its_range(tmp_path: Path, low: float, high: float, whole: bool) -> None:
    values = np.linspace(low, high, 24 * 20 * 18).reshape(24, 20, 18)
    values = np.rint(values).astype(np.int16) if whole else values.astype(np.float32)
    magnitude = save(tmp_path / "m.nii", blob().astype(np.float32))
    with pytest.raises(ScanError, match=f"phase runs from {low} to {high}, outside"):
        read_scan(magnitude, save(tmp_path / "p.nii", values))


@pytest.mark.parametrize(
    ("shape", "axis", "message"),
    [
        ((2, 3, 4), 3, "Channel axis 3 has length 1"),
        ((2, 3, 4, 5), 4, "Channel axis 4 has length 1"),
        ((2, 3, 4, 5), 2, "Channel axis 2 is not allowed"),
        ((2, 3, 4, 5, 2, 2), 3, "6-D"),
    ],
)
def test_channel_axis(tmp_path: Path, shape: tuple[int, ...], axis: int, message: str) -> None:
    with pytest.raises(ScanError, match=message):
        read_scan(save(tmp_path / "c.nii", np.ones(shape, np.float32)), channel_axis=axis)


def test_a_limit_of_the_users_memory_is_kept(tmp_path: Path) -> None:
    path = write(tmp_path / "large.nii.gz", nifti_bytes(np.ones((200, 200, 200), np.int16), 4))
    assert available_memory() > 32 * MIB
    with memory_for(32 * MIB), pytest.raises(ScanError, match="GiB in memory"):
        read_scan(path)
