"""Writing NIfTI images on a scan's grid: atomically, and without the source's free text."""

from __future__ import annotations

import gzip
import os
import secrets
from contextlib import suppress
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.caution import NIFTI_DESCRIP
from mrics.errors import ScanError
from mrics.scan.volume import Scan


def write_nifti(path: str | Path, data: NDArray[Any], like: Scan) -> Path:
    """Write an image on the grid of a scan as NIfTI-1, ``.nii`` or ``.nii.gz`` by name.

    The file is written under a temporary name in the same folder and then renamed. Affine, form
    codes and voxel size are the scan's, in mm; free-text header fields are blank but for
    ``descrip`` = "mrics research only". The same data gives the same bytes (no time stamp).

    Parameters
    ----------
    path : str or Path
        Must end in ``.nii`` or ``.nii.gz``.
    data : ndarray of shape (i, j, k) or (i, j, k, frame) or (i, j, k, frame, channel)
        Real, complex or bool (written as uint8); float16 is written as float32.
    like : Scan
        Whose affine and first three axis lengths the image has.

    Raises
    ------
    ScanError
        Wrong ending, another grid, or a folder that cannot be written.
    """
    path = Path(path)
    if not path.name.endswith((".nii", ".nii.gz")):
        raise ScanError(
            f"The image's name {path.name!r} has another ending.",
            str(path),
            "Let it end in .nii or .nii.gz.",
        )
    if data.shape[:3] != like.shape[:3] or data.ndim > 5:
        raise ScanError(
            f"The image has shape {data.shape}, the scan it is written for {like.shape}.",
            str(path),
            "Write images on the grid of their scan.",
        )
    data = _storable(data)
    header = _header(data, like)
    try:
        _write_atomic(path, header, data)
    except OSError as error:
        raise ScanError(
            f"The image cannot be written ({error.strerror}).",
            str(path),
            "Check that the folder exists, may be written and has room.",
        ) from error
    return path


def _storable(data: NDArray[Any]) -> NDArray[Any]:
    if data.dtype == np.bool_:
        return data.astype(np.uint8)
    if data.dtype == np.float16:
        return data.astype(np.float32)
    return data.astype(data.dtype.newbyteorder("="), copy=False)


def _header(data: NDArray[Any], like: Scan) -> Any:
    import nibabel as nib

    header = nib.Nifti1Header()
    header.set_data_dtype(data.dtype)
    header.set_data_shape(data.shape)
    header.set_zooms((*like.voxel_mm, *(1.0 for _ in data.shape[3:])))
    sform, qform = 2, 0
    if like.header is not None:
        sform, qform = int(like.header["sform_code"]), int(like.header["qform_code"])
        if data.ndim > 3:
            header["pixdim"][4] = like.header["pixdim"][4]
        time_units = int(like.header["xyzt_units"]) & 56
    else:
        time_units = 0
    # A source without any form code still gets its affine back through the sform.
    header.set_sform(like.affine, sform if sform or qform else 1)
    if qform:
        header.set_qform(like.affine, qform, strip_shears=True)
    header["xyzt_units"] = 2 | time_units
    header["descrip"] = NIFTI_DESCRIP.encode()
    header["vox_offset"] = 352
    header["magic"] = b"n+1"
    return header


def _write_atomic(path: Path, header: Any, data: NDArray[Any]) -> None:
    scratch = path.with_name(f".{path.name}.{os.getpid()}-{secrets.token_hex(4)}.part")
    try:
        with scratch.open("xb") as stream:
            if path.name.endswith(".gz"):
                # No name and no time in the gzip header: the same data gives the same bytes.
                with gzip.GzipFile("", "wb", compresslevel=1, fileobj=stream, mtime=0) as zipped:
                    _write_body(zipped, header, data)
            else:
                _write_body(stream, header, data)
        os.replace(scratch, path)
    except BaseException:
        with suppress(OSError):
            scratch.unlink()
        raise


def _write_body(stream: Any, header: Any, data: NDArray[Any]) -> None:
    stream.write(header.binaryblock)
    stream.write(b"\0" * 4)  # no header extensions
    for index in np.ndindex(*data.shape[:1:-1]):
        stream.write(data[(slice(None), slice(None), *index[::-1])].tobytes(order="F"))
