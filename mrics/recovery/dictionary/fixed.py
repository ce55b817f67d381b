"""Fixed dictionaries beside learned ones: overcomplete DCT, patch wavelets, their union."""

from __future__ import annotations

import warnings
from typing import Any

import numpy as np
import pywt
from numpy.typing import NDArray

from mrics.errors import RecoveryError

Array = NDArray[Any]
FIXED = ("dct", "wavelets", "union")


def fixed_atoms(name: str, size: tuple[int, int], number: int = 256) -> Array:
    """Atoms of a fixed dictionary, mean apart, of norm 1.

    Parameters
    ----------
    name : str
        "dct": products of cosines whose frequencies are finer than the orthonormal DCT-II's (equal
        to it where ``number`` is the samples of a patch); "wavelets": all translates inside the
        patch of Haar and db2 analysing functions at all scales; "union": both.
    size : tuple of int
        Patch size (u, v).
    number : int
        Atoms of the DCT; rounded up to a product of two counts.

    Returns
    -------
    ndarray of float64, shape (atom, u v)

    Raises
    ------
    RecoveryError
        For an unknown name.
    """
    if name not in FIXED:
        raise RecoveryError(
            f"There is no fixed dictionary {name!r}.", "source", f"Choose one of: {FIXED}."
        )
    parts = []
    if name in ("dct", "union"):
        parts.append(_cosines(size, number))
    if name in ("wavelets", "union"):
        parts.append(_wavelets(size))
    atoms = np.concatenate(parts)
    atoms = atoms - atoms.mean(axis=1, keepdims=True)
    norms = np.linalg.norm(atoms, axis=1)
    atoms = atoms[norms > 1e-6] / norms[norms > 1e-6, None]
    overlap = np.abs(atoms @ atoms.T)
    overlap[np.tril_indices(len(atoms))] = 0
    result: Array = atoms[~(overlap > 1 - 1e-9).any(axis=0)]
    return result


def _cosines(size: tuple[int, int], number: int) -> Array:
    side = int(np.ceil(np.sqrt(number)))
    lines = []
    for length in size:
        count = max(side, length)
        frequency = np.arange(count)[:, None] * length / count
        lines.append(np.cos(np.pi * frequency * (np.arange(length) + 0.5) / length))
    return np.einsum("ai,bj->abij", *lines).reshape(-1, size[0] * size[1])


def _wavelets(size: tuple[int, int]) -> Array:
    rows = []
    for name in ("haar", "db2"):
        levels = max(1, int(np.log2(min(size))) - (name != "haar"))
        with warnings.catch_warnings():
            # In a patch every coefficient touches the border; periods make that harmless.
            warnings.simplefilter("ignore", UserWarning)
            template = pywt.wavedec2(np.zeros(size), name, mode="periodization", level=levels)
        packed, slices = pywt.coeffs_to_array(template)
        for index in range(packed.size):
            packed.flat[index] = 1
            parts = pywt.array_to_coeffs(packed, slices, output_format="wavedec2")
            one = pywt.waverec2(parts, name, mode="periodization")[: size[0], : size[1]]
            packed.flat[index] = 0
            for du in range(0, size[0], 2):
                for dv in range(0, size[1], 2):
                    rows.append(np.roll(one, (du + 1, dv + 1), (0, 1)).ravel())
            rows.append(one.ravel())
    return np.array(rows)
