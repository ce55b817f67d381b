"""A dictionary with where it came from, and its file: a plain npz that is never unpickled."""

from __future__ import annotations

import io
import json
import math
import os
import tempfile
import zipfile
import zlib
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import RecoveryError

Array = NDArray[Any]
KIND, SCHEMA = "mrics patch dictionary", 1
#: atoms per patch at which the training residuals of a dictionary are kept
CHECK_SPARSITY = 6
_MOST = 4096
_ENTRIES = ("kind", "schema", "atoms", "patch", "layers", "residuals", "provenance")


@dataclass(frozen=True)
class Dictionary:
    """Atoms and what is known of them.

    Attributes
    ----------
    atoms : ndarray of shape (atom, n)
        Rows of norm 1, most used first; n = layers x patch samples.
    patch : tuple of int
        Size (u, v), or (plane, u, v) for 3-D patches.
    layers : int
        Planes stacked in a patch: depth times joint frames.
    residuals : ndarray of float32
        Relative squared residuals of the training patches at 6 atoms, sorted.
    provenance : dict
        Scan hashes and names, settings, version.
    """

    atoms: Array
    patch: tuple[int, ...]
    layers: int = 1
    residuals: NDArray[np.float32] = field(default_factory=lambda: np.empty(0, np.float32))
    provenance: dict[str, Any] = field(default_factory=dict)

    @property
    def scans(self) -> tuple[str, ...]:
        """SHA-256 of the scans it was trained on."""
        return tuple(scan["sha256"] for scan in self.provenance.get("scans", ()))

    def trained_on(self, hashes: Sequence[str]) -> str:
        """A warning for the report where test scans were training scans, else an empty text."""
        shared = set(hashes) & set(self.scans) - {""}
        if not shared:
            return ""
        return f"optimistic: the dictionary was trained on {len(shared)} of the test scans"


def save_dictionary(dictionary: Dictionary, path: str | Path) -> Path:
    """Write a dictionary as npz; the file appears whole or not at all."""
    path = Path(path)
    handle, name = tempfile.mkstemp(dir=path.parent, suffix=".npz")
    try:
        with os.fdopen(handle, "wb") as stream:
            np.savez(
                stream,
                kind=np.array(KIND),
                schema=np.array(SCHEMA),
                atoms=dictionary.atoms,
                patch=np.array(dictionary.patch, np.int64),
                layers=np.array(dictionary.layers),
                residuals=dictionary.residuals,
                provenance=np.array(json.dumps(dictionary.provenance, sort_keys=True)),
            )
        os.replace(name, path)
    except BaseException:
        Path(name).unlink(missing_ok=True)
        raise
    return path


def load_dictionary(
    path: str | Path,
    *,
    patch: Sequence[int] | None = None,
    layers: int | None = None,
    kind: str | None = None,
) -> Dictionary:
    """Read a dictionary file.

    Parameters
    ----------
    path : path
        As written by :func:`save_dictionary`.
    patch, layers, kind
        What it has to be: patch size, planes in a patch, "real" or "complex" atoms.

    Raises
    ------
    RecoveryError
        Where the file is not there, not ours, of another version, damaged, or differs from what it
        has to be.
    """
    where = Path(path).name

    def refuse(what: str, fix: str = "Train a dictionary anew with these settings.") -> Any:
        raise RecoveryError(what, where, fix)

    try:
        held = _entries(Path(path))
    except FileNotFoundError:
        refuse("There is no such dictionary file.", "Check the path.")
    except (ValueError, OSError, zipfile.BadZipFile, zlib.error, RuntimeError, EOFError) as problem:
        refuse(
            f"The file cannot be read as a dictionary ({type(problem).__name__}: {problem}).",
            "Give a file that training wrote.",
        )
    if str(held.get("kind", "")) != KIND:
        refuse("The file is not a dictionary of mrics.", "Give a file that training wrote.")
    missing = [name for name in _ENTRIES if name not in held]
    if missing:
        refuse(f"The dictionary lacks {', '.join(missing)}.")
    try:
        schema, depth = int(held["schema"]), int(held["layers"])
        size = tuple(int(n) for n in np.atleast_1d(held["patch"]))
        provenance = json.loads(str(held["provenance"]))
        if not all(isinstance(scan["sha256"], str) for scan in provenance.get("scans", ())):
            raise ValueError
    except (ValueError, TypeError, KeyError, AttributeError, OverflowError, RecursionError):
        refuse("The dictionary is damaged: an entry holds what does not belong there.")
    if schema != SCHEMA:
        refuse(f"The dictionary is of version {schema}, not {SCHEMA}.")
    if len(size) not in (2, 3) or not all(1 <= n <= _MOST for n in (depth, *size)):
        refuse(f"Patches of {size} in {depth} layers cannot be used.")
    found = Dictionary(held["atoms"], size, depth, held["residuals"], provenance)
    atoms = found.atoms
    residuals = found.residuals
    if residuals.dtype.kind != "f" or residuals.ndim != 1 or not np.isfinite(residuals).all():
        refuse("The training residuals of the dictionary are damaged.")
    if atoms.dtype.kind not in "fc" or atoms.ndim != 2 or not np.isfinite(atoms).all():
        refuse(f"Atoms of type {atoms.dtype} and shape {atoms.shape} are not a dictionary.")
    if atoms.shape[1] != found.layers * int(np.prod(found.patch[-2:])):
        refuse(
            f"Atoms of {atoms.shape[1]} samples do not fit {found.layers} layers of "
            f"{found.patch[-2:]}."
        )
    if not len(atoms) or np.abs(atoms).max() > 2:
        refuse("Atoms are not of norm 1.")
    if np.abs(np.linalg.norm(atoms, axis=1) - 1).max() > 1e-3:
        refuse("Atoms are not of norm 1.")
    if patch is not None and tuple(patch) != found.patch:
        refuse(f"The dictionary has patches of {found.patch}, the recovery asks {tuple(patch)}.")
    if layers is not None and layers != found.layers:
        refuse(f"The dictionary stacks {found.layers} planes in a patch, the recovery {layers}.")
    own = "complex" if atoms.dtype.kind == "c" else "real"
    if kind is not None and kind != own:
        refuse(f"The dictionary has {own} atoms ({atoms.dtype}), the recovery asks {kind} atoms.")
    return found


def _entries(path: Path) -> dict[str, Array]:
    """Arrays of an npz; sizes are checked before anything is unpacked.

    Training writes entries as they are: one that unpacks to more than the whole file is none of
    ours, and neither is an array that claims more than its entry holds.
    """
    held: dict[str, Array] = {}
    limit = path.stat().st_size
    with zipfile.ZipFile(path) as packed:
        for entry in packed.infolist():
            if entry.file_size > limit:
                raise ValueError(f"{entry.filename} unpacks to {entry.file_size:,} bytes")
            name = entry.filename.removesuffix(".npy")
            if name in _ENTRIES:
                held[name] = _array(packed.read(entry))
    return held


def _array(content: bytes) -> Array:
    stream = io.BytesIO(content)
    try:
        np.lib.format.read_magic(stream)
        shape, fortran, dtype = np.lib.format.read_array_header_1_0(stream)
    except Exception as problem:  # numpy parses the header as Python and passes on what that raises
        raise ValueError("an array whose header cannot be read") from problem
    rest = content[stream.tell() :]
    if (
        dtype.hasobject
        or math.prod(shape) * dtype.itemsize != len(rest)
        or min(shape, default=0) < 0
    ):
        raise ValueError("an array that does not fill its entry")
    return np.frombuffer(rest, dtype).reshape(shape, order="F" if fortran else "C")
