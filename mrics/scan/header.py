"""What a NIfTI header says, checked before any memory is asked for.

The file's content decides what it is, not its name: a gzip stream is unpacked, the magic at byte
344 (NIfTI-1) or 4 (NIfTI-2) says which header follows. Field meanings are those of ``nifti1.h``.
"""

from __future__ import annotations

import gzip
import math
import zlib
from dataclasses import dataclass, field
from pathlib import Path
from typing import IO, Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import ScanError
from mrics.numerics.memory import available_memory

GZIP_MAGIC = b"\x1f\x8b"
# Deflate cannot shrink further: 258 bytes per 2 bits, so 1032 to 1.
MAX_DEFLATE_RATIO = 1032
MAX_OFFSET = 64 * 1024**2
MEMORY_SHARE = 0.8
_TO_MM = {0: 1.0, 1: 1000.0, 2: 1.0, 3: 0.001}
_LETTERS = "ijk"


@dataclass(frozen=True)
class Header:
    """Facts of one NIfTI file, read without its image data.

    Attributes
    ----------
    path : Path
        The file.
    shape : tuple of int
        Axis lengths; axes of length 1 beyond the third are dropped.
    voxel_mm : tuple of 3 float
        Voxel size along i, j, k (header units converted; unknown units are taken as mm).
    affine : ndarray of shape (4, 4)
        Voxel index to world position in mm.
    dtype : numpy.dtype
        Stored type, with the file's byte order.
    slope, inter : float
        Scaling y = slope x + inter (1 and 0 where the header gives none).
    offset : int
        Byte at which image data starts.
    zipped : bool
        Whether the file is a gzip stream.
    dim_info : tuple of (str or None)
        Letters of the readout, phase and slice axes as the header names them.
    source : nibabel header
        The header itself.
    """

    path: Path
    shape: tuple[int, ...]
    voxel_mm: tuple[float, float, float]
    affine: NDArray[np.float64]
    dtype: np.dtype[Any]
    slope: float
    inter: float
    offset: int
    zipped: bool
    dim_info: tuple[str | None, str | None, str | None]
    source: Any = field(repr=False, compare=False)

    @property
    def name(self) -> str:
        """File name without folder and ending."""
        name = self.path.name
        for ending in (".nii.gz", ".nii", ".gz"):
            if name.lower().endswith(ending):
                return name[: -len(ending)]
        return name

    @property
    def is_complex(self) -> bool:
        """Whether values are stored as complex numbers."""
        return self.dtype.kind == "c"

    @property
    def frames(self) -> int:
        """Length of the fourth axis (1 for a 3-D file)."""
        return self.shape[3] if len(self.shape) > 3 else 1

    @property
    def count(self) -> int:
        """Number of stored values."""
        return math.prod(self.shape)

    @property
    def through_plane(self) -> str:
        """Letter of the axis that looks like the slice (or partition) axis.

        The header's own word (``dim_info``) where it has one, else the axis with the largest
        voxel; the later axis where several are equal to 1 %.
        """
        named = self.dim_info[2]
        if named is not None:
            return named
        largest = max(self.voxel_mm)
        return max(
            c for c, size in zip(_LETTERS, self.voxel_mm, strict=True) if size > 0.99 * largest
        )

    @property
    def looks_3d(self) -> bool:
        """Whether the grid looks like a 3-D sequence rather than 2-D multi-slice (a guess).

        3-D: at least 16 positions along :attr:`through_plane`, whose voxel is at most 1.8 times
        the larger of the other two, and no slice timing in the header (common practice, no
        source).
        """
        axis = _LETTERS.index(self.through_plane)
        others = [size for a, size in enumerate(self.voxel_mm) if a != axis]
        timed = float(self.source["slice_duration"]) > 0
        return self.shape[axis] >= 16 and self.voxel_mm[axis] <= 1.8 * max(others) and not timed


def read_header(path: str | Path, *, flat: bool = False) -> Header:
    """Read and check a NIfTI-1 or NIfTI-2 header without touching image data.

    Parameters
    ----------
    path : str or Path
        A single-file NIfTI, plain or gzip-compressed.
    flat : bool
        Whether one or two axes will do (a sampling mask); axes of length 1 are then added.

    Raises
    ------
    ScanError
        File missing, unreadable, not NIfTI, 2-D or more than 5-D, of a type that holds no
        numbers, shorter than its header claims, or larger than this machine can hold.
    """
    path = Path(path)
    first, zipped = _first_bytes(path)
    source = _parse(first, path)
    if flat:
        _add_axes(source)
    shape = _shape(source, path)
    dtype = _dtype(source, path)
    offset = _offset(source, path)
    _check_size(path, shape, dtype, offset, zipped)
    slope, inter = _scaling(source, path)
    to_mm = _to_mm(source, path)
    voxel = _voxel(source, path, to_mm)
    return Header(
        path=path,
        shape=shape,
        voxel_mm=voxel,
        affine=_affine(source, path, to_mm),
        dtype=dtype,
        slope=slope,
        inter=inter,
        offset=offset,
        zipped=zipped,
        dim_info=_dim_info(source),
        source=source,
    )


def open_stream(path: Path, zipped: bool) -> IO[bytes]:
    """The file's bytes, unpacked where it is a gzip stream."""
    return gzip.open(path, "rb") if zipped else path.open("rb")  # type: ignore[return-value]


def damaged(path: Path, error: Exception) -> ScanError:
    """The error for a file that ends early or whose gzip stream is broken."""
    return ScanError(
        f"The file is truncated or damaged ({str(error).rstrip('.')}).",
        str(path),
        "Copy or export it again; compare its size with the original's.",
    )


def _first_bytes(path: Path) -> tuple[bytes, bool]:
    if not path.exists():
        raise ScanError(
            "There is no such file.", str(path), "Check the path; it is relative to where you are."
        )
    if path.is_dir():
        raise ScanError(
            "This is a folder, not a scan.", str(path), "Name the .nii or .nii.gz file inside it."
        )
    try:
        with path.open("rb") as stream:
            zipped = stream.read(2) == GZIP_MAGIC
        with open_stream(path, zipped) as stream:
            return stream.read(540), zipped
    except (EOFError, zlib.error, gzip.BadGzipFile) as error:
        raise damaged(path, error) from error
    except OSError as error:
        raise ScanError(
            f"The file cannot be read ({error.strerror}).", str(path), "Check its permissions."
        ) from error


def _parse(first: bytes, path: Path) -> Any:
    import nibabel as nib

    if first[344:347] == b"ni1" or first[4:7] == b"ni2":
        raise ScanError(
            "This is the header of a two-file NIfTI pair.",
            str(path),
            "Save the pair as one .nii or .nii.gz file.",
        )
    kind: Any
    if len(first) >= 348 and first[344:347] == b"n+1":
        kind, size = nib.Nifti1Header, 348
    elif len(first) >= 540 and first[4:7] == b"n+2":
        kind, size = nib.Nifti2Header, 540
    else:
        found = "an empty file" if not first else f"it starts with {first[:8]!r}"
        raise ScanError(
            f"The file is not a NIfTI image ({found}, no NIfTI magic).",
            str(path),
            "Give a .nii or .nii.gz file; convert other formats first.",
        )
    for order, name in (("<", "little"), (">", "big")):
        if int.from_bytes(first[:4], name) == size:  # type: ignore[arg-type]
            return kind(first[:size], endianness=order, check=False)
    stated = int.from_bytes(first[:4], "little")
    raise _bad_header(path, f"sizeof_hdr is {stated}, it must be {size}")


def _bad_header(path: Path, why: str) -> ScanError:
    return ScanError(
        f"The NIfTI header is not valid: {why.rstrip('.')}.", str(path), "Export the scan again."
    )


def _shape(source: Any, path: Path) -> tuple[int, ...]:
    dim = [int(n) for n in source["dim"]]
    if not 1 <= dim[0] <= 7:
        raise _bad_header(path, f"dim[0] is {dim[0]}, allowed are 1 to 7")
    shape = dim[1 : dim[0] + 1]
    if min(shape) < 1:
        raise _bad_header(path, f"axis lengths {tuple(shape)} must all be at least 1")
    while len(shape) > 3 and shape[-1] == 1:
        shape.pop()
    if len(shape) < 3:
        raise ScanError(
            f"The data is {len(shape)}-D (shape {_by(shape)}); a scan has three axes, or four "
            "with frames.",
            str(path),
            "Stack the slices along a third axis (of length 1 for a single slice).",
        )
    return tuple(shape)


def _add_axes(source: Any) -> None:
    """One or two axes as three; what the header says of the others is not meant."""
    axes = int(source["dim"][0])
    if axes in (1, 2):
        source["dim"][0] = 3
        source["dim"][axes + 1 : 4] = 1
        source["pixdim"][axes + 1 : 4] = 1.0


def _dtype(source: Any, path: Path) -> np.dtype[Any]:
    code = int(source["datatype"])
    try:
        dtype = np.dtype(source.get_data_dtype())
    except Exception as error:
        raise _bad_header(path, f"datatype code {code} is unknown") from error
    if dtype.kind not in "iufc":
        raise ScanError(
            f"The stored values are no numbers (datatype code {code}: colour or bits).",
            str(path),
            "Export the scan as integer, float or complex values.",
        )
    return dtype


def _offset(source: Any, path: Path) -> int:
    offset = float(source["vox_offset"])
    least = 352 if int(source["sizeof_hdr"]) == 348 else 544
    if offset == 0:
        return least
    if not math.isfinite(offset) or offset != int(offset) or not least <= offset <= MAX_OFFSET:
        raise _bad_header(
            path,
            f"image data is said to start at byte {offset:g}, allowed are {least} to {MAX_OFFSET}",
        )
    return int(offset)


def _check_size(
    path: Path, shape: tuple[int, ...], dtype: np.dtype[Any], offset: int, zipped: bool
) -> None:
    stored = path.stat().st_size
    count = math.prod(shape)
    claimed = offset + count * dtype.itemsize
    most = stored * MAX_DEFLATE_RATIO if zipped else stored
    if claimed > most:
        holds = f"at most {most:,} when unpacked" if zipped else f"{stored:,}"
        raise ScanError(
            f"The header claims {_by(shape)} values of {dtype.itemsize} bytes ({claimed:,} bytes "
            f"in all), but the file holds {holds}: it is truncated or its header is wrong.",
            str(path),
            "Copy or export the file again.",
        )
    in_memory = count * (8 if dtype.kind == "c" else 4)
    budget = int(MEMORY_SHARE * available_memory())
    if in_memory > budget:
        raise ScanError(
            f"The scan of {_by(shape)} values needs {in_memory / 2**30:.1f} GiB in memory; "
            f"{budget / 2**30:.1f} GiB may be used here.",
            str(path),
            "Crop the scan or take fewer frames, or use a machine with more memory.",
        )


def _scaling(source: Any, path: Path) -> tuple[float, float]:
    slope, inter = float(source["scl_slope"]), float(source["scl_inter"])
    if slope == 0 or not math.isfinite(slope):
        return 1.0, 0.0
    if not math.isfinite(inter):
        raise _bad_header(path, f"scl_slope is {slope:g} but scl_inter is {inter}")
    return slope, inter


def _to_mm(source: Any, path: Path) -> float:
    code = int(source["xyzt_units"]) & 7
    if code not in _TO_MM:
        raise _bad_header(path, f"xyzt_units names the unknown space unit {code}")
    return _TO_MM[code]


def _voxel(source: Any, path: Path, to_mm: float) -> tuple[float, float, float]:
    sizes = [abs(float(size)) * to_mm for size in source["pixdim"][1:4]]
    for letter, size in zip(_LETTERS, sizes, strict=True):
        if not (math.isfinite(size) and size > 0):
            raise _bad_header(path, f"the voxel size along {letter} is {size:g} mm")
    return sizes[0], sizes[1], sizes[2]


def _affine(source: Any, path: Path, to_mm: float) -> NDArray[np.float64]:
    try:
        affine = np.array(source.get_best_affine(), dtype=np.float64)
    except Exception as error:
        raise _bad_header(path, f"its orientation cannot be read ({error})") from error
    with np.errstate(over="ignore", invalid="ignore"):
        affine[:3] *= to_mm
        lengths = np.linalg.norm(affine[:3, :3], axis=0)
    usable = np.isfinite(affine).all() and np.isfinite(lengths).all() and lengths.min() > 0
    if not usable or abs(np.linalg.det(affine[:3, :3] / lengths)) < 1e-6:
        raise _bad_header(path, "the matrix from voxels to positions is singular or not finite")
    return affine


def _dim_info(source: Any) -> tuple[str | None, str | None, str | None]:
    bits = int(source["dim_info"])
    found: list[str | None] = []
    for shift in (0, 2, 4):
        axis = (bits >> shift) & 3
        letter = _LETTERS[axis - 1] if axis else None
        found.append(letter if letter not in found else None)
    return found[0], found[1], found[2]


def _by(shape: tuple[int, ...] | list[int]) -> str:
    return " x ".join(str(n) for n in shape)
