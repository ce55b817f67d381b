"""Maps that laws are taken from: k-space energy of training scans, and tables."""

from __future__ import annotations

from collections.abc import Iterable
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import PatternError
from mrics.numerics import centred_fft
from mrics.numerics.arrays import open_array
from mrics.numerics.scaling import usual_size
from mrics.sampling.grid import Field
from mrics.scan.volume import Axes, Scan

_BLOCK = 16


def law_source(
    law: str, given: Any, shape: tuple[int, ...], axes: Axes | None = None
) -> Field | None:
    """The map a law takes, from what its entry gives; None for laws of the radius.

    Raises
    ------
    PatternError
        When it is missing, of another shape, negative, zero or not finite.
    """
    if law not in ("energy", "table"):
        return None
    key = "training" if law == "energy" else "table"
    if given is None:
        raise PatternError(
            f"The law {law!r} needs the key {key!r}.",
            key,
            "Name the training scans." if law == "energy" else "Name a file of densities.",
        )
    if law == "table":
        return read_density(given, shape)
    items = [given] if isinstance(given, str | Path | np.ndarray | Scan) else list(given)
    if all(isinstance(item, str | Path) for item in items):
        return _energy_of_files(tuple(str(item) for item in items), shape, axes)
    return training_energy(items, shape, axes)


@lru_cache(maxsize=4)
def _energy_of_files(files: tuple[str, ...], shape: tuple[int, ...], axes: Axes | None) -> Field:
    from mrics.scan import read_scan

    return training_energy((read_scan(file) for file in files), shape, axes)


def training_energy(
    scans: Iterable[Any], shape: tuple[int, ...], axes: Axes | None = None
) -> Field:
    """Mean energy of centred k-space at every position of the phase-encode grid.

    Parameters
    ----------
    scans : iterable of Scan or ndarray of shape (planes, u, v)
        Fully sampled scans; frames, channels, planes and (in 2-D) the readout are averaged.
    shape : tuple of int
        Phase-encode grid, which must be the scans' matrix along its axes.
    axes : Axes, optional
        Names of the file axes; by default readout i, phase j, and partition k on a 2-D grid.

    Returns
    -------
    ndarray of float64, shape ``shape``
        Rounded to single precision, so that it can be written and read exactly.

    Raises
    ------
    PatternError
        For another matrix, an empty list, or a scan whose outer k-space is empty: its energy
        would say that the outer positions need no samples.
    """
    axes = axes if axes is not None else Axes(partition="k" if len(shape) == 2 else None)
    total, count = np.zeros(shape), 0
    for item in scans:
        scan = item if isinstance(item, Scan) else _stack_scan(item, axes)
        if not scan.data.any():
            raise PatternError(
                "A training scan is zero everywhere.",
                f"training scan {scan.name!r}",
                "Name another scan.",
            )
        _refuse_empty_outer(scan, axes)
        stack = axes.to_planes(scan.data.reshape(*scan.shape[:3], -1))
        if stack.shape[1 : 1 + len(shape)] != shape:
            raise PatternError(
                f"The training scan has a matrix of {stack.shape[1:]}, the grid is {shape}.",
                f"training scan {scan.name!r}",
                "Train on scans of the protocol's own matrix.",
            )
        for start in range(0, len(stack), _BLOCK):
            block = centred_fft(stack[start : start + _BLOCK], (-2, -1)[: len(shape)])
            energy = np.square(block.real, dtype=np.float64) + np.square(
                block.imag, dtype=np.float64
            )
            total += energy.sum(axis=0) if len(shape) == 2 else energy.sum(axis=(0, 2))
        count += len(stack)
    if count == 0:
        raise PatternError("There is no training scan.", "training", "Name at least one scan.")
    # Only the shape counts, and single precision does not hold the squares of every scale.
    return usual_size(total / count)[0].astype(np.float32).astype(np.float64)


def _stack_scan(stack: NDArray[Any], axes: Axes) -> Scan:
    if stack.ndim != 3:
        raise PatternError(
            f"A training array has shape {stack.shape}, not (planes, u, v).",
            "training",
            "Give a stack of planes, or a scan.",
        )
    return Scan(axes.from_planes(stack, _file_shape(stack, axes)), np.eye(4), (1.0, 1.0, 1.0))


def _file_shape(stack: NDArray[Any], axes: Axes) -> tuple[int, ...]:
    sizes = dict(zip(axes.order, stack.shape, strict=True))
    return tuple(sizes[axis] for axis in range(3))


def _refuse_empty_outer(scan: Scan, axes: Axes) -> None:
    from mrics.scan.fitness.view import ScanView
    from mrics.scan.fitness.zero_fill import zero_filled  # one of many checks, and a fast one

    for finding in zero_filled(ScanView(scan, axes)):
        letters = {letter for letter, _ in finding.settings}
        if letters & {axes.phase, axes.partition}:
            raise PatternError(
                f"A training scan cannot give the law. {finding.what}",
                f"training scan {scan.name!r}, {finding.where}",
                finding.advice,
            )


def read_density(table: Any, shape: tuple[int, ...]) -> Field:
    """A table of densities: an array, or a file of numbers (.csv, .txt) or an array (.npy).

    Raises
    ------
    PatternError
        When it cannot be read, has another shape, or holds negative, non-finite or only zero
        values.
    """
    where = "table" if isinstance(table, np.ndarray | list | tuple) else str(table)
    values = np.asarray(_load(table, where), dtype=np.float64)
    if len(shape) == 1 and 1 in values.shape:
        values = values.ravel()
    if values.shape != shape:
        raise PatternError(
            f"The density table has shape {values.shape}, the grid is {shape}.",
            where,
            "Give one density per position, zero frequency at index N//2.",
        )
    bad = np.argwhere(~(np.isfinite(values) & (values >= 0)))
    if len(bad):
        at = tuple(int(i) for i in bad[0])
        raise PatternError(
            f"The density table holds {len(bad)} negative or non-finite values.",
            f"{where}, first at index {at}: {values[at]:g}",
            "Give densities of 0 or more.",
        )
    if not values.any():
        raise PatternError(
            "The density table is zero everywhere.", where, "Give a density above 0 somewhere."
        )
    return values


def _load(table: Any, where: str) -> Any:
    if not isinstance(table, str | Path):
        return table
    try:
        if Path(table).suffix == ".npy":
            return open_array(table)
        text = Path(table).read_text(encoding="utf-8")
        rows = [line.replace(",", " ").split() for line in text.splitlines()]
        return np.array([row for row in rows if row and not row[0].startswith("#")], dtype=float)
    except (OSError, ValueError) as error:
        raise PatternError(
            f"The density table cannot be read: {error}.",
            where,
            "Give a text file with one line of numbers per phase step, or a .npy array.",
        ) from error
