"""Codes of patches over a dictionary: one interface to matching pursuit, L1, LCA, hard threshold.

With atoms d_j as rows and a patch y as a row, codes a minimise or approximate

    "omp"   ||y - a D||^2 with few atoms, one by one (Pati 1993), to a count or to an error
    "l1"    1/2 ||y - a D||^2 + weight ||a||_1, accelerated proximal gradient
    "lca"   the same objective by the locally competitive algorithm (Rozell et al. 2008)
    "hard"  correlations above ``weight``, the rest 0 (exact for orthonormal atoms)

Real atoms may code complex patches: real and imaginary part share their atoms.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import RecoveryError
from mrics.numerics import map_blocks, one_blas_thread
from mrics.recovery.dictionary import kernels

Array = NDArray[Any]
METHODS = ("omp", "l1", "lca", "hard")
#: patches a thread codes at a time; fixed, so that sums have one order on any number of threads
CHUNK = 1024
_L1_TOLERANCE = 1e-6


@dataclass(frozen=True)
class Codes:
    """Sparse codes of patches.

    Attributes
    ----------
    index : ndarray of int32, shape (patch, most)
        Atoms used, in order of choice; entries beyond ``counts`` are 0.
    values : ndarray of shape (patch, most)
        Their coefficients, 0 beyond ``counts``.
    counts : ndarray of int32, shape (patch,)
        Atoms used.
    residual : ndarray of float64, shape (patch,)
        Squared residual.
    """

    index: NDArray[np.int32]
    values: Array
    counts: NDArray[np.int32]
    residual: NDArray[np.float64]

    def synthesise(self, atoms: Array) -> Array:
        """Patches (patch, n) of these codes."""
        out = np.zeros((len(self.counts), atoms.shape[1]), np.result_type(self.values, atoms))
        for slot in range(self.index.shape[1]):
            out += self.values[:, slot, None] * atoms[self.index[:, slot]]
        return out

    def dense(self, atoms: int) -> Array:
        """Codes as an array (patch, atoms)."""
        out = np.zeros((len(self.counts), atoms), self.values.dtype)
        np.add.at(out, (np.arange(len(out))[:, None], self.index), self.values)
        return out


class Prepared:
    """Atoms with their Gram matrix, and the matrix that correlates patches with them.

    ``columns`` is (n, atoms); for complex atoms (2 n, 2 atoms), real parts before imaginary ones,
    so that a row of patch samples times it is conj(atom) . patch.
    """

    def __init__(self, atoms: Array) -> None:
        self.atoms = np.ascontiguousarray(atoms)
        self.complex = np.iscomplexobj(atoms)
        with one_blas_thread():  # its threads would go on spinning beside the coding's
            gram = np.conj(self.atoms) @ self.atoms.T
        if self.complex:
            re, im = atoms.T.real, atoms.T.imag
            self.columns = np.ascontiguousarray(np.block([[re, -im], [im, re]]))
            self.gram = np.ascontiguousarray(np.stack([gram.real, gram.imag]))
        else:
            self.columns = np.ascontiguousarray(self.atoms.T)
            self.gram = np.ascontiguousarray(gram)
        self.real = self.columns.dtype


def code(
    patches: Array,
    atoms: Array,
    method: str = "omp",
    *,
    sparsity: int | None = None,
    error: float | Array = 0.0,
    weight: float = 0.0,
) -> Codes:
    """Code patches over a dictionary.

    Parameters
    ----------
    patches : ndarray of shape (patch, n)
        Real or complex, without their mean where the atoms are.
    atoms : ndarray of shape (atom, n)
        Of norm 1.
    method : str
        "omp", "l1", "lca" or "hard".
    sparsity : int, optional
        Most atoms ("omp"); default n.
    error : float or ndarray of shape (patch,)
        Squared residual to stop at ("omp").
    weight : float
        Weight of the L1 term or threshold.

    Returns
    -------
    Codes

    Raises
    ------
    RecoveryError
        For an unknown method, patches of another length than the atoms, complex atoms on real
        patches, values that are not finite, or a sparsity below 1.
    """
    patches, atoms = np.asarray(patches), np.asarray(atoms)
    _check(patches, atoms, method, sparsity, weight)
    if method == "omp":
        limit = min(sparsity or atoms.shape[1], *atoms.shape)
        return pursue(patches, Prepared(atoms), limit, error)
    if method == "hard":
        dense = patches @ np.conj(atoms).T
        dense[np.abs(dense) <= weight] = 0
    else:
        from mrics.recovery.sparse import recover_sparse

        solved = recover_sparse(
            patches.T, atoms.T, method=method, weight=weight, tolerance=_L1_TOLERANCE
        )
        dense = solved.x.T
    return from_dense(dense, patches, atoms)


def from_dense(dense: Array, patches: Array, atoms: Array) -> Codes:
    """Codes (patch, atom) as index and value lists, largest first."""
    counts = np.count_nonzero(dense, axis=1).astype(np.int32)
    most = max(1, int(counts.max(initial=0)))
    index = np.argsort(-np.abs(dense), axis=1, kind="stable")[:, :most].astype(np.int32)
    values = np.take_along_axis(dense, index, axis=1)
    index[values == 0] = 0
    left: Array = np.abs(patches - dense @ atoms)
    residual: Array = np.square(left, dtype=np.float64).sum(axis=1)
    return Codes(index, values, counts, residual)


def pursue(patches: Array, prepared: Prepared, limit: int, error: float | Array = 0.0) -> Codes:
    """Orthogonal matching pursuit over the compute threads; see :func:`code`."""
    real = prepared.real
    count, length = patches.shape
    turned = np.iscomplexobj(patches)
    sides = 2 if turned else 1
    targets = np.broadcast_to(np.asarray(error, np.float64), (count,))
    index = np.zeros((count, limit), np.int32)
    values = np.zeros((count, sides, limit), real)
    counts = np.zeros(count, np.int32)
    residual = np.zeros(count)
    run = kernels.pursue_rows_complex if prepared.complex else kernels.pursue_rows

    def one(start: int) -> None:
        part = slice(start, start + CHUNK)
        block = np.empty((len(patches[part]), sides, length), real)
        block[:, 0] = patches[part].real
        if turned:
            block[:, 1] = patches[part].imag
        shape = (len(block), sides, len(prepared.atoms))
        alpha = (block.reshape(-1, len(prepared.columns)) @ prepared.columns).reshape(shape)
        run(
            block, alpha, prepared.gram, limit, np.ascontiguousarray(targets[part]),
            index[part], values[part], counts[part], residual[part],
        )  # fmt: skip

    map_blocks(one, range(0, count, CHUNK))
    joined = values[:, 0] + 1j * values[:, 1] if turned else values[:, 0]
    kind = np.result_type(real, np.complex64) if turned else real
    return Codes(index, joined.astype(kind, copy=False), counts, residual)


def _check(patches: Array, atoms: Array, method: str, sparsity: int | None, weight: float) -> None:
    if method not in METHODS:
        raise RecoveryError(
            f"There is no coding method {method!r}.",
            "method",
            f"Choose one of: {', '.join(METHODS)}.",
        )
    if patches.ndim != 2 or atoms.ndim != 2 or patches.shape[1] != atoms.shape[1]:
        raise RecoveryError(
            f"Patches of shape {patches.shape} do not fit atoms of shape {atoms.shape}.",
            "patches, axes (patch, sample)",
            "Give patches of as many samples as the atoms have.",
        )
    if np.iscomplexobj(atoms) and not np.iscomplexobj(patches):
        raise RecoveryError(
            f"Atoms are {atoms.dtype} and patches {patches.dtype}.",
            "patches",
            "Code real patches with real atoms, or make the patches complex.",
        )
    if not np.isfinite(patches).all():
        bad = int(np.argwhere(~np.isfinite(patches))[0, 0])
        raise RecoveryError(
            "Patches hold NaN or infinite values.",
            f"patches, index {bad}",
            "Leave these patches out or repair the scan.",
        )
    if sparsity is not None and sparsity < 1:
        raise RecoveryError(
            f"A sparsity of {sparsity} leaves no atom.", "sparsity", "Give 1 or more."
        )
    if not weight >= 0:
        raise RecoveryError(
            f"A weight of {weight} is not a number from 0 up.", "weight", "Give 0 or more."
        )
