"""Images of one unit on disk, on the scan's grid."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.quality import error_maps
from mrics.sampling import Pattern
from mrics.scan import Scan, write_nifti
from mrics.study.prepare import Prepared

Entry = dict[str, str | int]


def write_maps(
    folder: Path,
    label: tuple[str, str, int],
    scan: Prepared,
    image: NDArray[Any],
    pattern: Pattern,
    further: Mapping[str, NDArray[Any]],
) -> list[Entry]:
    """Write recovered image, errors, further maps and the pattern.

    Parameters
    ----------
    folder : Path
        Study folder.
    label : tuple of str, str and int
        Arm, scan and draw.
    scan : Prepared
        The scan.
    image : ndarray of shape (plane, u, v)
        Recovered planes; complex where phases compare with the reference's.
    pattern : Pattern
        What was acquired.
    further : mapping of kind to ndarray of shape (plane, u, v)
        Maps of the recovery and of the measures.

    Returns
    -------
    list of dict
        One entry of ``maps`` in results.json per file, paths relative to the study folder.
    """
    signed, complex_error = error_maps(image, scan.stack)
    arrays: dict[str, Any] = {
        "recovered": image if np.iscomplexobj(scan.stack) else np.abs(image),
        "error": signed,
    }
    if complex_error is not None and np.iscomplexobj(scan.stack):
        arrays["error_complex"] = complex_error
    written: list[Entry] = []
    for kind, stack in {**arrays, **further}.items():
        dtype = np.complex64 if np.iscomplexobj(stack) else np.float32
        volume = scan.to_volume(stack.astype(dtype, copy=False))
        written.append(_write(folder, label, kind, volume, scan.scan))
    for kind, values in _grid_maps(pattern).items():
        if pattern.frames:
            values = np.moveaxis(values, 0, -1)
        shape = (*pattern.grid, *(1,) * (3 - len(pattern.grid)))
        volume = values.reshape(*shape, *values.shape[len(pattern.grid) :])
        written.append(_write(folder, label, kind, volume, _nowhere(volume)))
    return written


def write_sheets(
    folder: Path, label: tuple[str, str, int], sheets: Mapping[str, NDArray[Any]]
) -> list[Entry]:
    """Write arrays of 3 or 4 axes that have no place in the patient, such as atoms.

    Returns
    -------
    list of dict
        As :func:`write_maps`.
    """
    written = []
    for kind, sheet in sheets.items():
        dtype = np.complex64 if np.iscomplexobj(sheet) else np.float32
        values = sheet.astype(dtype)
        written.append(_write(folder, label, kind, values, _nowhere(values)))
    return written


def _nowhere(volume: NDArray[Any]) -> Scan:
    """Unit voxels at the origin, for what has no place in the patient."""
    return Scan(volume, np.eye(4), (1.0, 1.0, 1.0))


def _grid_maps(pattern: Pattern) -> dict[str, Any]:
    """The mask, and the echo (from 1) that acquires each position where a shot has several."""
    maps: dict[str, Any] = {"pattern": pattern.mask.astype(np.uint8)}
    if pattern.order is not None and pattern.order[:, 1].max(initial=0) > 0:
        maps["order"] = np.zeros(pattern.mask.shape, dtype=np.int16)
        maps["order"][pattern.mask] = pattern.order[:, 1] + 1
    return maps


def _write(
    folder: Path, label: tuple[str, str, int], kind: str, volume: NDArray[Any], like: Scan
) -> Entry:
    arm, scan, draw = label
    path = folder / "arms" / arm / f"{scan}_draw{draw}_{kind}.nii.gz"
    path.parent.mkdir(parents=True, exist_ok=True)
    write_nifti(path, volume, like)
    file = path.relative_to(folder).as_posix()
    return {"kind": kind, "scan": scan, "arm": arm, "draw": draw, "file": file}
