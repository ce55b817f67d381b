"""Prepared scans as memory-mapped files that every worker process shares."""

from __future__ import annotations

import pickle
import shutil
import zlib
from dataclasses import replace
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.study.files import read_json, write_json
from mrics.study.prepare import Prepared

SCRATCH = "scratch"
_ARRAYS = ("stack", "body", "sensitivities", "channel_data", "labels")


class ScratchError(Exception):
    """A scratch file is missing or damaged; it is made again from the scan."""


def write_scratch(prepared: Prepared, folder: Path) -> Path:
    """Write a prepared scan for workers; what is there already is replaced."""
    shutil.rmtree(folder, ignore_errors=True)
    folder.mkdir(parents=True)
    sums: dict[str, int] = {}
    for name in _ARRAYS:
        array = getattr(prepared, name)
        if array is not None:
            np.save(folder / f"{name}.npy", array)
            sums[name] = _checksum(folder / f"{name}.npy")
    rest = replace(
        prepared,
        stack=np.empty(0),
        body=np.empty(0, dtype=bool),
        sensitivities=None,
        channel_data=None,
        labels=None,
        scan=replace(prepared.scan, data=np.empty(0)),
    )
    packed = pickle.dumps((rest, prepared.scan.shape, prepared.scan.data.dtype.str))
    (folder / "scan.bin").write_bytes(packed)
    sums["scan"] = zlib.crc32(packed)
    write_json(folder / "sums.json", sums)
    return folder


@lru_cache(maxsize=1)
def read_scratch(folder: Path) -> Prepared:
    """A prepared scan from its scratch folder, arrays memory-mapped; the last one is kept.

    Raises
    ------
    ScratchError
        Where a file is missing or its check sum is another.
    """
    sums = read_json(folder / "sums.json")
    if not isinstance(sums, dict):
        raise ScratchError(str(folder))
    try:
        packed = (folder / "scan.bin").read_bytes()
        if zlib.crc32(packed) != sums["scan"]:
            raise ScratchError(str(folder))
        # Written by this study a moment ago, checked just above; never a file from outside.
        rest, shape, dtype = pickle.loads(packed)
        arrays: dict[str, NDArray[Any]] = {}
        for name in _ARRAYS:
            if name in sums:
                if _checksum(folder / f"{name}.npy") != sums[name]:
                    raise ScratchError(str(folder))
                arrays[name] = np.load(folder / f"{name}.npy", mmap_mode="r")
    except (OSError, KeyError, ValueError, pickle.UnpicklingError) as error:
        raise ScratchError(str(folder)) from error
    # The grid alone is needed of the whole volume: a view of one zero has its shape.
    grid = np.broadcast_to(np.zeros((), dtype=dtype), shape)
    whole: Prepared = replace(rest, scan=replace(rest.scan, data=grid), **arrays)
    return whole


def _checksum(path: Path) -> int:
    total = 0
    with path.open("rb") as stream:
        while chunk := stream.read(2**22):
            total = zlib.crc32(chunk, total)
    return total
