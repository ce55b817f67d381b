"""Reading NIfTI: types, scaling, units, orientation, pairs, memory."""

from __future__ import annotations

import gzip
import hashlib
import math
import tracemalloc
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from nifti_files import blob, nifti_bytes, save, write
from open_volumes import open_volume

from mrics.scan import read_header, read_scan

# Type codes of nifti1.h (constants DT_UINT8 ... DT_COMPLEX128).
CODES = {
    "uint8": 2,
    "int16": 4,
    "int32": 8,
    "float32": 16,
    "complex64": 32,
    "float64": 64,
    "int8": 256,
    "uint16": 512,
    "uint32": 768,
    "int64": 1024,
    "uint64": 1280,
    "complex128": 1792,
}


@pytest.mark.parametrize("order", ["<", ">"])
@pytest.mark.parametrize("kind", sorted(CODES))
def test_every_type_in_both_byte_orders(tmp_path: Path, kind: str, order: str) -> None:
    values = np.arange(1, 61).reshape(3, 4, 5, order="F").astype(kind)
    if values.dtype.kind == "c":
        values += 2j * values
    path = write(tmp_path / "scan.nii", nifti_bytes(values, CODES[kind], order=order))
    scan = read_scan(path)
    expected = {"complex64": np.complex64, "complex128": np.complex128}.get(kind, np.float32)
    assert scan.data.dtype == expected
    np.testing.assert_array_equal(scan.data, values.astype(expected))
    assert scan.complex_source == ("complex" if values.dtype.kind == "c" else "magnitude")


def test_slope_and_intercept_of_reals(tmp_path: Path) -> None:
    values = np.arange(24, dtype=np.int16).reshape(2, 3, 4)
    path = write(tmp_path / "s.nii.gz", nifti_bytes(values, 4, slope=0.5, inter=-3.0))
    np.testing.assert_array_equal(read_scan(path).data, values * 0.5 - 3.0)


def test_slope_zero_means_no_scaling(tmp_path: Path) -> None:
    # nifti1.h: "If the scl_slope field is nonzero"
    values = np.arange(24, dtype=np.int16).reshape(2, 3, 4)
    path = write(tmp_path / "s.nii", nifti_bytes(values, 4, slope=0.0, inter=100.0))
    np.testing.assert_array_equal(read_scan(path).data, values)


def test_slope_and_intercept_of_complex_act_on_both_parts(tmp_path: Path) -> None:
    # nifti1.h: for complex types the scaling is applied to real and imaginary part.
    values = (np.arange(24) + 1j * np.arange(24)[::-1]).reshape(2, 3, 4).astype(np.complex64)
    path = write(tmp_path / "s.nii", nifti_bytes(values, 32, slope=2.0, inter=1.0))
    data = read_scan(path).data
    np.testing.assert_array_equal(data.real, values.real * 2 + 1)
    np.testing.assert_array_equal(data.imag, values.imag * 2 + 1)


@pytest.mark.parametrize(("units", "factor"), [(0, 1), (1, 1000), (2, 1), (3, 0.001), (10, 1)])
def test_space_units_become_mm(tmp_path: Path, units: int, factor: float) -> None:
    # nifti1.h: bits 0-2 of xyzt_units: 1 metre, 2 millimetre, 3 micrometre; 10 = mm + seconds.
    values = np.ones((2, 3, 4), np.int16)
    content = nifti_bytes(values, 4, units=units, quaternion=(0, 0, 0))
    scan = read_scan(write(tmp_path / "s.nii", content))
    np.testing.assert_allclose(scan.voxel_mm, np.array([1, 2, 3]) * factor)
    np.testing.assert_allclose(np.diag(scan.affine)[:3], np.array([1, 2, 3]) * factor)


@pytest.mark.parametrize(
    ("quaternion", "rotation"),
    [
        ((0, 0, math.sqrt(0.5)), [[0, -1, 0], [1, 0, 0], [0, 0, 1]]),
        ((0, 1, 0), [[-1, 0, 0], [0, 1, 0], [0, 0, -1]]),
    ],
)
def test_quaternion_orientation(
    tmp_path: Path, quaternion: tuple[float, float, float], rotation: list[list[float]]
) -> None:
    # nifti1.h, method 2: a = sqrt(1 - b^2 - c^2 - d^2), columns scaled by pixdim.
    content = nifti_bytes(np.ones((2, 3, 4), np.int16), 4, quaternion=quaternion)
    scan = read_scan(write(tmp_path / "s.nii", content))
    np.testing.assert_allclose(scan.affine[:3, :3], np.array(rotation) * [1, 2, 3], atol=1e-6)


def test_open_volume_equals_nibabel() -> None:
    path = open_volume("A")
    scan = read_scan(path)
    image = nib.load(path)
    np.testing.assert_array_equal(scan.data, image.get_fdata(dtype=np.float32))
    np.testing.assert_allclose(scan.affine, image.affine)
    assert scan.frames == 2
    # The SHA-256 published beside the file list of the package data.
    assert scan.sha256 == "42097dfbab9d2a036b41ae5c97a359591cf2cf5c3f8dc6ca6455c0b8a7f22696"
    assert scan.name == "example4d"


def test_header_facts_of_open_volumes() -> None:
    header = read_header(open_volume("A"))
    assert header.shape == (128, 96, 24, 2)
    # The file's dim_info: nibabel's own test data states frequency i, phase j, slice k.
    assert header.dim_info == nib_letters(header.source.get_dim_info()) == ("i", "j", "k")
    thick = read_header(open_volume("B"))
    assert thick.shape == (128, 128, 10)
    assert not thick.looks_3d
    assert thick.through_plane == "k"
    assert read_header(open_volume("G")).looks_3d


def nib_letters(numbers: tuple[int | None, ...]) -> tuple[str | None, ...]:
    return tuple("ijk"[n] if n is not None else None for n in numbers)


def test_content_decides_not_the_name(tmp_path: Path) -> None:
    values = np.arange(1, 25, dtype=np.int16).reshape(2, 3, 4)
    content = nifti_bytes(values, 4)
    plain = tmp_path / "plain.nii.gz"
    plain.write_bytes(content)
    zipped = tmp_path / "zipped.nii"
    zipped.write_bytes(gzip.compress(content))
    np.testing.assert_array_equal(read_scan(plain).data, values)
    np.testing.assert_array_equal(read_scan(zipped).data, values)


def test_nifti_2(tmp_path: Path) -> None:
    values = np.arange(1, 25, dtype=np.float32).reshape(2, 3, 4)
    path = tmp_path / "two.nii.gz"
    nib.save(nib.Nifti2Image(values, np.diag([2.0, 2, 2, 1])), path)
    scan = read_scan(path)
    np.testing.assert_array_equal(scan.data, values)
    assert scan.voxel_mm == (2.0, 2.0, 2.0)


@pytest.mark.parametrize(
    ("stored", "turn"),
    [
        (lambda p: p.astype(np.float32), "radians"),
        (lambda p: np.mod(p, 2 * np.pi).astype(np.float32), "radians 0 to 2 pi"),
        (
            lambda p: np.rint(np.mod(p, 2 * np.pi) / (2 * np.pi) * 4095.49).astype(np.int16),
            "12 bit",
        ),
        (lambda p: (np.rint(p / np.pi * 2047) * 2).astype(np.int16), "-4096 to 4094"),
        (lambda p: np.rint(p * 1000).astype(np.int16), "milliradians"),
    ],
)
def test_magnitude_and_phase(tmp_path: Path, stored: object, turn: str) -> None:
    rng = np.random.default_rng(1)
    magnitude = (blob() + 1).astype(np.float32)
    phase = rng.uniform(-np.pi, np.pi, magnitude.shape)
    scan = read_scan(
        save(tmp_path / "m.nii.gz", magnitude),
        save(tmp_path / "p.nii.gz", stored(phase)),  # type: ignore[operator]
    )
    assert scan.complex_source == "magnitude+phase"
    assert scan.data.dtype == np.complex64
    error = np.angle(scan.data * np.exp(-1j * phase))
    assert np.abs(error).max() < 0.003, turn
    np.testing.assert_allclose(np.abs(scan.data), magnitude, rtol=1e-5)


def test_real_and_imaginary(tmp_path: Path) -> None:
    rng = np.random.default_rng(2)
    value = (rng.standard_normal((4, 5, 6)) + 1j * rng.standard_normal((4, 5, 6))) * 100
    real, imaginary = (
        save(tmp_path / name, part.astype(np.float32))
        for name, part in (("re.nii", value.real), ("im.nii", value.imag))
    )
    scan = read_scan(real, imaginary=imaginary)
    np.testing.assert_allclose(scan.data, value.astype(np.complex64))
    assert scan.complex_source == "real+imaginary"
    parts = b"".join(hashlib.sha256(p.read_bytes()).digest() for p in (real, imaginary))
    assert scan.sha256 == hashlib.sha256(parts).hexdigest()


def test_channels(tmp_path: Path) -> None:
    rng = np.random.default_rng(3)
    value = rng.standard_normal((3, 4, 5, 6, 2)).astype(np.float32)
    four = read_scan(save(tmp_path / "c4.nii", value[..., 0]), channel_axis=3)
    assert four.shape == (3, 4, 5, 1, 6)
    assert (four.frames, four.channels) == (1, 6)
    np.testing.assert_array_equal(four.data[:, :, :, 0], value[..., 0])
    path = save(tmp_path / "c5.nii", value)
    np.testing.assert_array_equal(read_scan(path, channel_axis=4).data, value)
    np.testing.assert_array_equal(read_scan(path, channel_axis=3).data, np.moveaxis(value, 3, 4))


def test_one_frame_is_a_3d_scan() -> None:
    assert read_scan(open_volume("B")).shape == (128, 128, 10)


def test_a_large_scan_stays_small_in_memory(tmp_path: Path) -> None:
    shape = (256, 256, 160)
    path = tmp_path / "large.nii.gz"
    values = np.zeros(shape, np.int16)
    values[64:192, 64:192] = 500
    path.write_bytes(gzip.compress(nifti_bytes(values, 4), compresslevel=1))
    del values
    tracemalloc.start()
    scan = read_scan(path)
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert scan.data.nbytes == 4 * math.prod(shape)
    assert peak < scan.data.nbytes + 32 * 2**20
