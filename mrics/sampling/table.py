"""Sampling tables and masks as files: CSV, JSON, NIfTI.

A CSV or JSON table has one row per acquired position, in the order it is played where an order is
known: shot, echo, phase and partition index from 0, the same counted from zero frequency, frame.
A NIfTI mask is a 0/1 image of shape (phase, partition), a fourth axis holding frames.
"""

from __future__ import annotations

import base64
import csv
import io
import json
import math
import os
import secrets
import zlib
from contextlib import suppress
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.caution import RESEARCH_ONLY
from mrics.errors import PatternError
from mrics.sampling.grid import check_calibration, check_grid
from mrics.sampling.masks import pattern_of_mask
from mrics.sampling.pattern import Pattern
from mrics.sampling.probability import ONE, Quanta

COLUMNS = (
    "shot",
    "echo",
    "phase",
    "partition",
    "phase_from_centre",
    "partition_from_centre",
    "frame",
)
_LARGEST = 2**31 - 1
# As large as a protocol's acceleration.
_LARGEST_R = 1000
_SUFFIXES = (".csv", ".json", ".nii", ".nii.gz")


def write_table(pattern: Pattern, path: str | Path) -> Path:
    """Write a pattern as a sampling table (.csv, .json) or a mask (.nii, .nii.gz).

    The file is written under a temporary name and renamed. CSV and JSON read back with the same
    hash; a mask holds no order.

    Parameters
    ----------
    pattern : Pattern
        Any pattern.
    path : str or Path
        Its ending says which form.

    Raises
    ------
    PatternError
        For another ending, or a folder that cannot be written.
    """
    path = Path(path)
    kind = _kind(path)
    if kind.startswith(".nii"):
        _write_mask(pattern, path)
        return path
    text = _csv_text(pattern) if kind == ".csv" else _json_text(pattern)
    _write_text(path, text)
    return path


def read_pattern(path: str | Path, shape: tuple[int, ...] | int | None = None) -> Pattern:
    """Read a sampling table or a mask, made here or elsewhere.

    Parameters
    ----------
    path : str or Path
        .csv, .json, .nii or .nii.gz.
    shape : tuple of int, optional
        Phase-encode grid the pattern must have; needed for a CSV file that does not name it.

    Returns
    -------
    Pattern
        ``calibration`` is what the file says, else the largest fully sampled central block.
        ``settings["note"]`` says so when every position is acquired (R = 1).

    Raises
    ------
    PatternError
        For a file that is missing, unreadable, of another grid, not binary or empty.
    """
    path = Path(path)
    kind = _kind(path)
    grid = None if shape is None else check_grid(shape)
    if not path.is_file():
        raise PatternError("The pattern file does not exist.", str(path), "Check the path.")
    if kind.startswith(".nii"):
        return _read_mask(path, grid)
    text = _text(path)
    table = _parse_csv(text, path) if kind == ".csv" else _parse_json(text, path)
    return _table_pattern(table, grid, path)


def law_quanta(path: str | Path) -> Quanta | None:
    """Inclusion probabilities kept in a JSON table, in units of 2^-30; None where not kept.

    They are kept for laws that come from files (``energy``, ``table``), so that the table can be
    drawn again without them.
    """
    path = Path(path)
    stored = _parse_json(_text(path), path)
    if "probability" not in stored:
        return None
    grid = check_grid(tuple(_numbers(stored.get("grid"), "grid", path)))
    size = 4 * math.prod(grid)
    try:
        raw = zlib.decompressobj().decompress(base64.b64decode(stored["probability"]), size + 1)
    except (ValueError, TypeError, zlib.error) as error:
        raise _bad_probability(path) from error
    if len(raw) != size:
        raise _bad_probability(path)
    return np.frombuffer(raw, dtype="<i4").astype(np.int64).reshape(grid)


def _bad_probability(path: Path) -> PatternError:
    return PatternError(
        "The kept probabilities are damaged or do not fit the grid.",
        f"{path}, probability",
        "Write the table again.",
    )


def rows(pattern: Pattern) -> list[list[int | None]]:
    """One row of :data:`COLUMNS` per acquired position, in the order played."""
    at = np.argwhere(pattern.mask)
    frame = at[:, 0] if pattern.frames else np.zeros(len(at), dtype=np.int64)
    phase = at[:, 1 if pattern.frames else 0]
    two = len(pattern.grid) == 2
    partition = at[:, -1] if two else np.zeros(len(at), dtype=np.int64)
    half = (pattern.grid[0] // 2, pattern.grid[1] // 2 if two else 0)
    order = pattern.order
    play: Any = slice(None)
    if order is not None:
        play = np.lexsort((order[:, 1], order[:, 0], frame))
    shot_echo = [[None, None]] * len(at) if order is None else order[play].tolist()
    rest = np.stack([phase, partition, phase - half[0], partition - half[1], frame], axis=1)
    return [[*a, *b] for a, b in zip(shot_echo, rest[play].tolist(), strict=True)]


def _kind(path: Path) -> str:
    for suffix in _SUFFIXES:
        if path.name.endswith(suffix):
            return suffix
    raise PatternError(
        f"The pattern file's name {path.name!r} has an unknown ending.",
        str(path),
        f"Let it end in {', '.join(_SUFFIXES)}.",
    )


def _facts(pattern: Pattern) -> dict[str, Any]:
    from mrics import __version__

    return {
        "mrics": __version__,
        "caution": RESEARCH_ONLY,
        "grid": list(pattern.grid),
        "frames": pattern.frames,
        "calibration": list(pattern.calibration),
        "acquired": int(pattern.mask.sum()),
        "acceleration": round(pattern.acceleration, 7),
        "hash": pattern.hash,
    }


def _csv_text(pattern: Pattern) -> str:
    out = io.StringIO()
    for key, value in _facts(pattern).items():
        shown = " ".join(map(str, value)) if isinstance(value, list) else value
        out.write(f"# {key}: {shown}\n")
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(COLUMNS)
    writer.writerows(rows(pattern))
    return out.getvalue()


def _json_text(pattern: Pattern) -> str:
    stored = {**_facts(pattern), "settings": pattern.settings}
    if pattern.probability is not None and pattern.settings.get("law") in ("energy", "table"):
        one = pattern.probability[0] if pattern.frames else pattern.probability
        raw = np.rint(one * ONE).astype("<i4").tobytes()
        stored["probability"] = base64.b64encode(zlib.compress(raw, 9)).decode()
    head = json.dumps({**stored, "columns": COLUMNS}, indent=1)
    lines = ",\n  ".join(json.dumps(row) for row in rows(pattern))
    return f'{head[:-2]},\n "rows": [\n  {lines}\n ]\n}}\n'


def _write_text(path: Path, text: str) -> None:
    scratch = path.with_name(f".{path.name}.{os.getpid()}-{secrets.token_hex(4)}.part")
    try:
        scratch.write_text(text, encoding="utf-8")
        os.replace(scratch, path)
    except OSError as error:
        with suppress(OSError):
            scratch.unlink()
        raise PatternError(
            f"The table cannot be written ({error.strerror}).",
            str(path),
            "Check that the folder exists and may be written.",
        ) from error


def _text(path: Path) -> str:
    try:
        return path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        raise PatternError(
            f"The pattern file cannot be read: {error}.", str(path), "Check the file."
        ) from error


def _parse_csv(text: str, path: Path) -> dict[str, Any]:
    table: dict[str, Any] = {}
    lines = []
    for line in text.splitlines():
        if line.startswith("#"):
            key, _, value = line[1:].partition(":")
            table[key.strip()] = value.strip()
        elif line.strip():
            lines.append(line)
    try:
        content = list(csv.reader(lines))
    except csv.Error as error:
        raise PatternError(
            f"The file is not CSV: {error}.", str(path), "Write the table again."
        ) from error
    table["columns"] = [name.strip() for name in content[0]] if content else []
    table["rows"] = [[cell.strip() or None for cell in row] for row in content[1:]]
    for key in ("grid", "calibration"):
        if key in table:
            table[key] = table[key].split()
    return table


def _parse_json(text: str, path: Path) -> dict[str, Any]:
    try:
        table = json.loads(text)
    except (ValueError, RecursionError) as error:
        raise PatternError(
            f"The file is not JSON: {error}.", str(path), "Write the table again."
        ) from error
    rows = table.get("rows") if isinstance(table, dict) else None
    listed = isinstance(rows, list) and all(isinstance(row, list) for row in rows)
    if not listed or not isinstance(table.get("columns"), list):
        raise PatternError(
            "The JSON file holds no sampling table.", str(path), "It needs 'columns' and 'rows'."
        )
    return table


def _numbers(cells: Any, key: str, path: Path) -> list[int]:
    try:
        numbers = [int(cell) for cell in cells]
        # int() takes 1.5 and true, and a text is a list of digits
        whole = not isinstance(cells, str) and all(
            isinstance(cell, str) or (cell == number and not isinstance(cell, bool))
            for cell, number in zip(cells, numbers, strict=True)
        )
    except (TypeError, ValueError, OverflowError):
        whole = False
    if not whole or any(abs(number) > _LARGEST for number in numbers):
        raise PatternError(
            f"{key} holds {str(cells)[:80]}, which are not whole numbers up to {_LARGEST}.",
            f"{path}, {key}",
            "Write whole numbers.",
        )
    return numbers


def _column(table: dict[str, Any], name: str, path: Path) -> list[int] | None:
    """A column of whole numbers, None where it is absent or empty."""
    columns = table["columns"]
    if name not in columns:
        return None
    at = columns.index(name)
    cells = [row[at] if at < len(row) else None for row in table["rows"]]
    if all(cell is None for cell in cells):
        return None
    return _numbers(cells, f"column {name}", path)


def _table_pattern(table: dict[str, Any], grid: tuple[int, ...] | None, path: Path) -> Pattern:
    written = grid
    if "grid" in table:
        written = check_grid(tuple(_numbers(table["grid"], "grid", path)))
    if written is None:
        raise PatternError(
            "The table does not say how large its grid is.",
            str(path),
            "Give the shape of the grid, or a line such as '# grid: 256 192'.",
        )
    if grid is not None and written != grid:
        raise PatternError(
            f"The pattern has the grid {written}, not {grid}.", str(path), "Use another pattern."
        )
    frames = max(0, *_numbers([table.get("frames", 0)], "frames", path))
    positions = math.prod(written) * max(1, frames)
    if positions > _LARGEST_R * max(1, len(table["rows"])):
        raise PatternError(
            f"The table lists {len(table['rows'])} of {positions} positions; at most 1 in "
            f"{_LARGEST_R} may be left.",
            f"{path}, grid",
            "Check the grid and the number of frames.",
        )
    named = {"phase": written[0]}
    if len(written) == 2:
        named["partition"] = written[1]
    if frames:
        named = {"frame": frames, **named}
    where = []
    for name, length in named.items():
        column = _column(table, name, path)
        if not column:
            raise PatternError(
                f"The table has no positions in a column {name!r}.",
                str(path),
                f"Its columns are {', '.join(map(str, table['columns']))[:200]}.",
            )
        _check_range(column, length, name, path)
        where.append(np.array(column, dtype=np.int64))
    mask = np.zeros((*((frames,) if frames else ()), *written), dtype=bool)
    flat = np.ravel_multi_index(tuple(where), mask.shape)
    if np.unique(flat).size != flat.size:
        twice = int(np.flatnonzero(np.bincount(flat) > 1)[0])
        at = tuple(int(i) for i in np.unravel_index(twice, mask.shape))
        raise PatternError(
            f"The position {at} is listed more than once.", str(path), "List each position once."
        )
    mask.ravel()[flat] = True
    calibration = None
    if "calibration" in table:
        sizes = _numbers(table["calibration"], "calibration", path)
        calibration = check_calibration(sizes, written)
    settings = table.get("settings", {"pattern": "file", "file": str(path)})
    if not isinstance(settings, dict):
        raise PatternError(
            f"settings holds {str(settings)[:80]}, which is no table.",
            f"{path}, settings",
            "Write the table again.",
        )
    return pattern_of_mask(
        mask,
        frames,
        calibration=calibration,
        order=_order(table, flat, path),
        settings=settings,
    )


def _check_range(column: list[int], length: int, name: str, path: Path) -> None:
    for row, value in enumerate(column):
        if not 0 <= value < length:
            raise PatternError(
                f"The {name} index {value} is outside 0 ... {length - 1}.",
                f"{path}, row {row + 1}, column {name}",
                "Count positions from 0.",
            )


def _order(table: dict[str, Any], flat: NDArray[np.int64], path: Path) -> NDArray[np.int64] | None:
    shot, echo = _column(table, "shot", path), _column(table, "echo", path)
    if shot is None or echo is None:
        return None
    return np.array([shot, echo], dtype=np.int64).T[np.argsort(flat)]


def _write_mask(pattern: Pattern, path: Path) -> None:
    from mrics.errors import ScanError
    from mrics.scan import Scan, write_nifti

    image = np.moveaxis(pattern.mask, 0, -1) if pattern.frames else pattern.mask
    frame_axis = image.shape[-1:] if pattern.frames else ()
    grid = (*pattern.grid, 1)[:2]
    image = image.reshape(*grid, 1, *frame_axis)
    try:
        write_nifti(path, image, Scan(image, np.eye(4), (1.0, 1.0, 1.0)))
    except ScanError as error:
        raise PatternError(error.what, error.where, error.fix) from error


def _read_mask(path: Path, grid: tuple[int, ...] | None) -> Pattern:
    from mrics.errors import ScanError
    from mrics.scan.header import read_header
    from mrics.scan.values import read_values

    try:
        values = read_values(read_header(path, flat=True), zero_allowed=True)
    except ScanError as error:
        raise PatternError(error.what, error.where, error.fix) from error
    if not np.isin(values, (0, 1)).all():
        other = values[~np.isin(values, (0, 1))].ravel()[0]
        raise PatternError(
            f"The mask holds the value {other:g}, not only 0 and 1.",
            str(path),
            "Write 1 where a position is acquired and 0 elsewhere.",
        )
    mask, frames = _mask_axes(values != 0, grid, path)
    return pattern_of_mask(mask, frames, settings={"pattern": "file", "file": str(path)})


def _mask_axes(
    values: NDArray[np.bool_], grid: tuple[int, ...] | None, path: Path
) -> tuple[NDArray[np.bool_], int]:
    """Mask with frames first, and their number, from an image's axes."""
    full = values.reshape(*values.shape, *(1,) * max(0, 4 - values.ndim))
    if full.ndim == 4 and full.shape[2] == 1:
        frames = full.shape[3] if full.shape[3] > 1 else 0
        plane = np.moveaxis(full[:, :, 0], -1, 0)
        if full.shape[1] == 1 and (grid is None or len(grid) == 1):
            plane = plane[..., 0]
        mask = plane if frames else plane[0]
        if grid is None or mask.shape[1 if frames else 0 :] == grid:
            return np.asarray(mask), frames
    elif full.ndim == 4 and full.shape[3] == 1 and grid is not None:
        volume = full[..., 0]  # a 3-D mask that is the same at every readout position
        for axis in range(3):
            first = np.asarray(volume.take(0, axis))
            if first.shape == grid and (volume == np.expand_dims(first, axis)).all():
                return first, 0
    raise PatternError(
        f"The mask has shape {values.shape[: 2 if values.shape[2:] == (1,) else None]}"
        + (f", the grid is {grid}." if grid else ", which is no (phase, partition) image."),
        str(path),
        "Give an image of shape (phase, partition), a fourth axis for frames.",
    )
