"""Learning atoms from patches: online in mini-batches, and K-SVD.

Online (Mairal, Bach, Ponce & Sapiro 2010, J. Mach. Learn. Res. 11:19): codes a of each mini-batch
are accumulated as A = sum a^H a and B = sum a^H y, and the atoms updated block by block,

    d_j <- d_j + (b_j - sum_k A_jk d_k) / A_jj, made of norm 1.

K-SVD (Aharon, Elad & Bruckstein 2006, IEEE Trans. Signal Process. 54:4311): atom by atom, the
residual without it, on the patches that use it, is replaced by its best rank-one approximation.
Atoms nobody uses and atoms equal to others are replaced by the patches coded worst.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import RecoveryError
from mrics.numerics import one_blas_thread, stream
from mrics.recovery.dictionary.coding import Codes, Prepared, pursue
from mrics.recovery.dictionary.kernels import compiled

Array = NDArray[Any]
#: patches of one online update; how much of the past is kept at the start of a new pass
BATCH, KEEP = 2048, 0.3
#: inner product above which two atoms count as the same
SAME = 0.99


@compiled
def _accumulate(
    index: Any, values: Any, counts: Any, patches: Any, first: Any, second: Any
) -> None:
    """Add a^H a to ``first`` and a^H y to ``second``."""
    for p in range(len(counts)):
        for s in range(counts[p]):
            j = index[p, s]
            factor = np.conj(values[p, s])
            for t in range(counts[p]):
                first[j, index[p, t]] += factor * values[p, t]
            row, patch = second[j], patches[p]
            for i in range(len(patch)):
                row[i] += factor * patch[i]


@compiled
def _update(atoms: Any, first: Any, second: Any, work: Any) -> None:
    """One round of block updates; atoms that no code used stay."""
    for j in range(len(atoms)):
        weight = first[j, j].real
        if weight <= 1e-12:
            continue
        for i in range(len(work)):
            work[i] = second[j, i]
        for k in range(len(atoms)):
            factor = first[j, k]
            if factor != 0 and k != j:
                other = atoms[k]
                for i in range(len(work)):
                    work[i] -= factor * other[i]
        norm = 0.0
        for i in range(len(work)):
            norm += abs(work[i]) ** 2
        if norm > 1e-24 * weight * weight:
            norm = 1 / np.sqrt(norm)
            for i in range(len(work)):
                atoms[j, i] = work[i] * norm


def start_atoms(patches: Array, number: int, seed: int, kind: Any = None) -> Array:
    """Atoms to start from: different patches, of norm 1.

    Raises
    ------
    RecoveryError
        Where there are fewer patches than atoms, or all patches are constant.
    """
    kind = np.dtype(kind or patches.dtype)
    if not len(patches) or not np.any(patches):
        raise RecoveryError(
            f"None of the {len(patches)} patches holds anything but a constant.",
            "patches",
            "Learn from a scan with structure.",
        )
    if len(patches) < number:
        raise RecoveryError(
            f"{len(patches)} patches cannot teach {number} atoms.",
            "patches",
            "Give more scans or planes, or ask for fewer atoms.",
        )
    order = stream(seed, "first atoms").permutation(len(patches))
    chosen = real_rows(patches[order[:number]], kind)
    tilt = 1e-6 * scale_of(patches)
    chosen = chosen + tilt * stream(seed, "tilt").standard_normal(chosen.shape)
    # A patch's mean stays apart from atoms.
    norms = np.linalg.norm(chosen, axis=1, keepdims=True)
    return (chosen / np.maximum(norms, 1e-30)).astype(kind)


def real_rows(patches: Array, kind: Any) -> Array:
    """Complex patches as the larger of their real and imaginary part where ``kind`` is real."""
    if np.issubdtype(kind, np.complexfloating) or not np.iscomplexobj(patches):
        return patches
    stronger = np.linalg.norm(patches.real, axis=1) >= np.linalg.norm(patches.imag, axis=1)
    return np.where(stronger[:, None], patches.real, patches.imag)


def scale_of(patches: Array) -> float:
    """Root mean square sample of the patches."""
    return float(np.sqrt(np.mean(np.abs(patches) ** 2, dtype=np.float64))) or 1.0


def learn_online(
    patches: Array,
    number: int,
    *,
    sparsity: int = 5,
    error: float = 0.0,
    passes: int = 3,
    seed: int = 0,
    start: Array | None = None,
    kind: Any = None,
) -> Array:
    """Learn atoms in mini-batches of 2048 patches.

    Parameters
    ----------
    patches : ndarray of shape (patch, n)
        Without their mean; real or complex.
    number : int
        Atoms.
    sparsity : int
        Most atoms per patch.
    error : float
        Squared residual of a patch to stop at.
    passes : int
        Times all patches are seen.
    seed : int
        Seed of the order and of the first atoms: same seed, same bits.
    start : ndarray of shape (number, n), optional
        Atoms to start from; default: patches.
    kind : dtype, optional
        Type of the atoms; real atoms may be learned from complex patches.

    Returns
    -------
    ndarray of shape (number, n)
        Atoms of norm 1, the most used ones first.

    Raises
    ------
    RecoveryError
        See :func:`start_atoms`.
    """
    kind = np.dtype(kind or patches.dtype)
    atoms = start_atoms(patches, number, seed, kind) if start is None else start.astype(kind)
    unit = scale_of(patches)
    patches = patches / patches.dtype.type(unit)
    error = error / unit**2
    first = np.zeros((number, number), kind)
    second = np.zeros(atoms.shape, kind)
    work = np.empty(atoms.shape[1], kind)
    limit = min(sparsity, *atoms.shape)
    generator = stream(seed, "passes")
    use = np.zeros(number, np.int64)
    # Threads of linear algebra only get in the way of matrices this small.
    with one_blas_thread():
        for turn in range(passes):
            order = generator.permutation(len(patches))
            use[:] = 0
            worst = np.zeros((0, atoms.shape[1]), patches.dtype)
            first *= kind.type(KEEP)
            second *= kind.type(KEEP)
            for begin in range(0, len(patches), BATCH):
                block = patches[order[begin : begin + BATCH]]
                codes = pursue(block, Prepared(atoms), limit, error)
                _add(codes, block, kind, first, second)
                _update(atoms, first, second, work)
                use += np.bincount(_used(codes), minlength=number)
                worst = block[np.argsort(-codes.residual, kind="stable")[:number]]
            if turn + 1 < passes:
                _replace(atoms, use, worst, first, second)
    return atoms[np.argsort(-use, kind="stable")]


def _add(codes: Codes, block: Array, kind: Any, first: Array, second: Array) -> None:
    values = codes.values
    if np.iscomplexobj(block) and not np.issubdtype(kind, np.complexfloating):
        for side, part in ((values.real, block.real), (values.imag, block.imag)):
            _accumulate(
                codes.index, np.ascontiguousarray(side), codes.counts,
                np.ascontiguousarray(part), first, second,
            )  # fmt: skip
    else:
        _accumulate(
            codes.index, values, codes.counts, block.astype(kind, copy=False), first, second
        )


def _used(codes: Codes) -> Array:
    return codes.index[np.arange(codes.index.shape[1]) < codes.counts[:, None]]


def _replace(atoms: Array, use: Array, worst: Array, *sums: Array) -> int:
    """Put badly coded patches where atoms are dead or equal; how many were replaced."""
    overlap = np.abs(np.conj(atoms) @ atoms.T)
    overlap[np.tril_indices(len(atoms))] = 0
    bad = np.flatnonzero((use == 0) | (overlap > SAME).any(axis=0))
    candidates = real_rows(worst, atoms.dtype)
    norms = np.linalg.norm(candidates, axis=1)
    candidates = candidates[norms > 0] / norms[norms > 0, None]
    bad = bad[: len(candidates)]
    atoms[bad] = candidates[: len(bad)]
    if sums:
        sums[0][bad] = 0
        sums[0][:, bad] = 0
        sums[1][bad] = 0
    return len(bad)


def learn_ksvd(
    patches: Array,
    number: int,
    *,
    sparsity: int = 5,
    error: float = 0.0,
    rounds: int = 10,
    seed: int = 0,
    start: Array | None = None,
) -> tuple[Array, list[float]]:
    """Learn atoms by K-SVD.

    Parameters
    ----------
    patches : ndarray of shape (patch, n)
        Without their mean; real or complex, as the atoms will be.
    number, sparsity, error, seed, start
        See :func:`learn_online`.
    rounds : int
        Times that all patches are coded and all atoms updated.

    Returns
    -------
    atoms : ndarray of shape (number, n)
    history : list of float
        Root mean square residual, relative to the patches, after every round's atom sweep.
    """
    atoms = start_atoms(patches, number, seed) if start is None else start.copy()
    limit = min(sparsity, *atoms.shape)
    size = max(float(np.linalg.norm(patches)), 1e-30)
    history: list[float] = []
    with one_blas_thread():
        for turn in range(rounds):
            codes = pursue(patches, Prepared(atoms), limit, error)
            dense = codes.dense(number)
            left = sweep(patches, atoms, dense)
            history.append(float(np.linalg.norm(left)) / size)
            if turn + 1 < rounds:
                energy = np.sum(np.abs(left) ** 2, axis=1)
                worst = patches[np.argsort(-energy, kind="stable")[:number]]
                _replace(atoms, np.count_nonzero(dense, axis=0), worst)
    return atoms, history


def sweep(patches: Array, atoms: Array, dense: Array) -> Array:
    """Update atoms and their coefficients in place at fixed support; the residual that is left.

    Every step is the best rank-one approximation, so the residual never rises.
    """
    left = patches - dense @ atoms
    for j in range(len(atoms)):
        users = np.flatnonzero(dense[:, j])
        if not len(users):
            continue
        part = left[users] + dense[users, j, None] * atoms[j]
        # The right singular vector of a tall matrix from its small Gram matrix.
        _, vectors = np.linalg.eigh(np.conj(part.T) @ part)
        atoms[j] = np.conj(vectors[:, -1])
        dense[users, j] = part @ vectors[:, -1]
        left[users] = part - dense[users, j, None] * atoms[j]
    return left
