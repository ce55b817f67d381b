"""Image data of one file, read as a stream: scaled, converted and checked slab by slab."""

from __future__ import annotations

import gzip
import hashlib
import zlib
from pathlib import Path
from typing import IO, Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import ScanError
from mrics.numerics.scaling import largest_part
from mrics.scan.header import Header, damaged, open_stream

SLAB_BYTES = 4 * 1024**2
# Padding after the last voxel that some writers leave; more than this is refused unread.
MAX_TRAILING = 1024**2
# A Fourier transform of larger values would leave single precision.
LARGEST = 1e33


def read_values(header: Header, *, zero_allowed: bool = False) -> NDArray[Any]:
    """All values of a file in its own axis order, scaled by slope and intercept.

    Parameters
    ----------
    header : Header
        From :func:`mrics.scan.header.read_header`.
    zero_allowed : bool
        Whether a file of zeros alone is accepted (a phase or imaginary part).

    Returns
    -------
    ndarray of shape ``header.shape``, Fortran order
        float32 for stored integers and reals, complex64 or complex128 for stored complex values.
        ``y = slope x + inter``, applied to real and imaginary part alike as ``nifti1.h`` says.

    Raises
    ------
    ScanError
        File truncated or damaged, NaN or infinite values (also those above 1e33), only zeros.
    """
    wide = header.dtype.kind == "c" and header.dtype.itemsize > 8
    kind = np.complex128 if wide else np.complex64 if header.is_complex else np.float32
    flat = np.empty(header.count, dtype=kind)
    bad, first_bad, any_signal = 0, -1, False
    step = max(1, SLAB_BYTES // header.dtype.itemsize)
    raw = bytearray(step * header.dtype.itemsize)
    try:
        with open_stream(header.path, header.zipped) as stream:
            _skip(stream, header.offset)
            for start in range(0, header.count, step):
                stop = min(start + step, header.count)
                view = memoryview(raw)[: (stop - start) * header.dtype.itemsize]
                _fill(stream, view, header)
                slab = flat[start:stop]
                with np.errstate(over="ignore", invalid="ignore"):
                    slab[...] = _scale(np.frombuffer(view, dtype=header.dtype), header)
                wrong = ~np.isfinite(slab)
                if largest_part(slab) > LARGEST:
                    wrong |= (np.abs(slab.real) > LARGEST) | (np.abs(slab.imag) > LARGEST)
                if wrong.any():
                    if first_bad < 0:
                        first_bad = start + int(np.argmax(wrong))
                    bad += int(np.count_nonzero(wrong))
                any_signal = any_signal or bool(slab.any())
            _check_end(stream, header)
    except (EOFError, zlib.error, gzip.BadGzipFile) as error:
        raise damaged(header.path, error) from error
    except OSError as error:
        raise ScanError(
            f"The file cannot be read ({error.strerror}).", str(header.path), "Check the disk."
        ) from error
    if bad:
        index = tuple(int(n) for n in np.unravel_index(first_bad, header.shape, order="F"))
        raise ScanError(
            f"{bad} of {header.count} voxels are NaN, infinite or beyond single precision.",
            f"{header.path}, first at index {index}",
            "Replace them (mask or interpolate) before the scan is used as a reference.",
        )
    if not any_signal and not zero_allowed:
        raise ScanError(
            "Every voxel of the volume is zero.", str(header.path), "Export the scan again."
        )
    return flat.reshape(header.shape, order="F")


def file_hash(*paths: Path) -> str:
    """SHA-256 of a file's bytes; of the concatenated hashes where a scan has several files."""
    digests = []
    for path in paths:
        with path.open("rb") as stream:
            digests.append(hashlib.file_digest(stream, "sha256"))
    if len(digests) == 1:
        return digests[0].hexdigest()
    return hashlib.sha256(b"".join(d.digest() for d in digests)).hexdigest()


def _skip(stream: IO[bytes], count: int) -> None:
    while count > 0:
        got = len(stream.read(min(count, SLAB_BYTES)))
        if got == 0:
            raise EOFError("it ends before its image data starts")
        count -= got


def _fill(stream: IO[bytes], view: memoryview, header: Header) -> None:
    filled = 0
    while filled < len(view):
        got = stream.readinto(view[filled:])  # type: ignore[attr-defined]
        if not got:
            expected = header.count * header.dtype.itemsize
            raise EOFError(f"it ends before the {expected:,} bytes of image data its header claims")
        filled += got


def _scale(values: NDArray[Any], header: Header) -> NDArray[Any]:
    slope, inter = header.slope, header.inter
    if slope == 1 and inter == 0:
        return values
    if header.is_complex:
        return values.astype(np.complex128) * slope + complex(inter, inter)
    return values.astype(np.float64) * slope + inter


def _check_end(stream: IO[bytes], header: Header) -> None:
    """Read to the end, so that a gzip stream's checksum is compared, but not without limit."""
    left = MAX_TRAILING
    while left > 0:
        got = len(stream.read(left))
        if got == 0:
            return
        left -= got
    raise ScanError(
        "The file unpacks to far more bytes than its header claims."
        if header.zipped
        else "The file holds far more bytes than its header claims.",
        str(header.path),
        "Its header is wrong or it is no image; export the scan again.",
    )
