"""Compiled orthogonal matching pursuit of patches, serial; callers spread chunks over threads.

Batch form (Rubinstein, Zibulevsky & Elad 2008) with the Gram matrix G = D^H D: nothing of patch
length is touched after the correlations. With the chosen atoms orthonormalised one by one into
e_1, e_2, ..., the rows q_t = D^H e_t hold the Cholesky factor of the chosen Gram block for free
(<d_j, e_t> = q_t[j]), so that one step is

    l^2 = G_jj - sum_t |q_t[j]|^2,   q_k = (G_:j - sum_t conj(q_t[j]) q_t) / l,
    z_k = a_j / l,   a <- a - z_k q_k,   ||r||^2 <- ||r||^2 - |z_k|^2.

Correlations are one matrix product for many patches, made by the caller. Real atoms take several
right sides that share their atoms (the real and imaginary part of a complex patch, each with its
own coefficient); complex atoms have a kernel of their own, with real and imaginary parts in
separate rows.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.numerics.kernel_cache import numba

compiled = numba.njit(
    nogil=True,
    cache=True,
    error_model="numpy",
    fastmath={"contract", "reassoc", "nsz", "arcp", "nnan"},
)
#: squared length of an atom beyond the atoms chosen, below which it counts as dependent on them
_DEPENDENT = 1e-5
#: lanes that the largest correlation is looked for in
LANES = 32


@compiled
def energy_of(patch: Any) -> Any:
    """Sum of squares of (side, n)."""
    energy = 0.0
    for r in range(patch.shape[0]):
        for i in range(patch.shape[1]):
            energy += patch[r, i] * patch[r, i]
    return energy


@compiled
def _largest(alpha: Any, power: Any, lanes: Any) -> Any:
    """First atom of the largest squared correlation, summed over the sides of ``alpha``.

    Lane n of ``lanes`` holds the largest of atoms n, n + LANES, ...: maxima of neighbours become
    vectors, a running maximum does not. ``power`` is filled with the squares.
    """
    for r in range(alpha.shape[0]):
        row = alpha[r]
        if r == 0:
            for n in range(len(power)):
                power[n] = row[n] * row[n]
        else:
            for n in range(len(power)):
                power[n] += row[n] * row[n]
    for n in range(LANES):
        lanes[n] = 0
    for start in range(0, len(power), LANES):
        part = power[start : start + LANES]
        for n in range(len(part)):
            lanes[n] = max(lanes[n], part[n])
    one, two, three, four = lanes[0], lanes[1], lanes[2], lanes[3]
    for n in range(4, LANES, 4):
        one = lanes[n] if lanes[n] > one else one
        two = lanes[n + 1] if lanes[n + 1] > two else two
        three = lanes[n + 2] if lanes[n + 2] > three else three
        four = lanes[n + 3] if lanes[n + 3] > four else four
    most = max(max(one, two), max(three, four))
    at = len(power) - 1
    for lane in range(LANES):
        if lanes[lane] == most:
            for n in range(lane, at, LANES):
                if power[n] == most:
                    at = n
                    break
    return at


@compiled
def pursue_one(
    energy: Any,
    gram: Any,
    limit: Any,
    target: Any,
    alpha: Any,
    power: Any,
    lanes: Any,
    q: Any,
    z: Any,
    chosen: Any,
    values: Any,
) -> Any:
    """Code one patch of ``energy`` over real atoms; (atoms used, squared residual).

    ``alpha`` (side, atoms) holds its correlations and is destroyed. ``chosen`` and ``values``
    (side, limit) receive the atoms and coefficients; ``power``, ``lanes``, ``q`` (limit, atoms) and
    ``z`` (side + 1, limit) are workspace. It stops at ``limit`` atoms or at a squared residual of
    ``target``.
    """
    if energy <= target or energy <= 0:
        return 0, energy
    sides, atoms = len(values), len(power)
    floor = 1e-12 * energy
    count = 0
    while count < limit and energy > target and energy > floor:
        j = _largest(alpha, power, lanes)
        if power[j] <= floor * 1e-3:
            break
        square = gram[j, j]
        for t in range(count):
            square -= q[t, j] * q[t, j]
        if square < _DEPENDENT:
            break
        scale = power.dtype.type(1) / np.sqrt(square)
        chosen[count] = j
        for r in range(sides):
            z[r, count] = alpha[r, j] * scale
            energy -= z[r, count] * z[r, count]
        z[sides, count] = scale
        if count + 1 < limit and energy > target:
            fresh = q[count]
            source = gram[j]
            for n in range(atoms):
                fresh[n] = source[n] * scale
            pairs = count - count % 2
            for t in range(0, pairs, 2):
                a, b = q[t, j] * scale, q[t + 1, j] * scale
                old, older = q[t], q[t + 1]
                for n in range(atoms):
                    fresh[n] -= a * old[n] + b * older[n]
            for t in range(pairs, count):
                a = q[t, j] * scale
                old = q[t]
                for n in range(atoms):
                    fresh[n] -= a * old[n]
            for r in range(sides):
                factor = z[r, count]
                row = alpha[r]
                for n in range(atoms):
                    row[n] -= factor * fresh[n]
        count += 1
    for r in range(sides):
        for k in range(count - 1, -1, -1):
            value = z[r, k]
            for s in range(k + 1, count):
                value -= q[k, chosen[s]] * values[r, s]
            values[r, k] = value * z[sides, k]
    return count, max(energy, 0.0)


@compiled
def pursue_one_complex(
    energy: Any,
    gram: Any,
    limit: Any,
    target: Any,
    alpha: Any,
    power: Any,
    lanes: Any,
    q: Any,
    z: Any,
    chosen: Any,
    values: Any,
) -> Any:
    """The same for complex atoms: real and imaginary parts along the first axis of all arrays.

    ``alpha`` (2, atoms), ``gram`` (2, atoms, atoms), ``q`` (2, limit, atoms), ``z`` (3, limit),
    ``values`` (2, limit).
    """
    if energy <= target or energy <= 0:
        return 0, energy
    atoms = len(power)
    floor = 1e-12 * energy
    re, im = alpha[0], alpha[1]
    count = 0
    while count < limit and energy > target and energy > floor:
        j = _largest(alpha, power, lanes)
        if power[j] <= floor * 1e-3:
            break
        square = gram[0, j, j]
        for t in range(count):
            square -= q[0, t, j] * q[0, t, j] + q[1, t, j] * q[1, t, j]
        if square < _DEPENDENT:
            break
        scale = power.dtype.type(1) / np.sqrt(square)
        chosen[count] = j
        zr, zi = re[j] * scale, im[j] * scale
        z[0, count], z[1, count], z[2, count] = zr, zi, scale
        energy -= zr * zr + zi * zi
        if count + 1 < limit and energy > target:
            fr, fi = q[0, count], q[1, count]
            gr, gi = gram[0, j], gram[1, j]
            for n in range(atoms):
                # Column j of a Hermitian matrix is its conjugate row.
                fr[n] = gr[n] * scale
                fi[n] = -gi[n] * scale
            for t in range(count):
                a, b = q[0, t, j] * scale, q[1, t, j] * scale
                qr, qi = q[0, t], q[1, t]
                for n in range(atoms):
                    fr[n] -= a * qr[n] + b * qi[n]
                    fi[n] -= a * qi[n] - b * qr[n]
            for n in range(atoms):
                re[n] -= zr * fr[n] - zi * fi[n]
            for n in range(atoms):
                im[n] -= zr * fi[n] + zi * fr[n]
        count += 1
    for k in range(count - 1, -1, -1):
        vr, vi = z[0, k], z[1, k]
        for s in range(k + 1, count):
            a, b = q[0, k, chosen[s]], q[1, k, chosen[s]]
            vr -= a * values[0, s] + b * values[1, s]
            vi -= a * values[1, s] - b * values[0, s]
        values[0, k] = vr * z[2, k]
        values[1, k] = vi * z[2, k]
    return count, max(energy, 0.0)


@compiled
def pursue_rows(
    patches: Any,
    alpha: Any,
    gram: Any,
    limit: Any,
    targets: Any,
    index: Any,
    values: Any,
    counts: Any,
    residual: Any,
) -> None:
    """Code (patch, side, n) over real atoms, correlations (patch, side, atoms) given.

    ``index`` (patch, limit) and ``values`` (patch, side, limit) are filled up to ``counts``.
    """
    sides, atoms = alpha.shape[1], alpha.shape[2]
    power, lanes = np.empty(atoms, alpha.dtype), np.empty(LANES, alpha.dtype)
    q, z = np.empty((limit, atoms), alpha.dtype), np.empty((sides + 1, limit), alpha.dtype)
    for p in range(patches.shape[0]):
        counts[p], residual[p] = pursue_one(
            energy_of(patches[p]), gram, limit, targets[p], alpha[p], power, lanes, q, z, index[p],
            values[p],
        )  # fmt: skip


@compiled
def pursue_rows_complex(
    patches: Any,
    alpha: Any,
    gram: Any,
    limit: Any,
    targets: Any,
    index: Any,
    values: Any,
    counts: Any,
    residual: Any,
) -> None:
    """The same for complex atoms; shapes as in :func:`pursue_one_complex`."""
    atoms = alpha.shape[2]
    power, lanes = np.empty(atoms, alpha.dtype), np.empty(LANES, alpha.dtype)
    q, z = np.empty((2, limit, atoms), alpha.dtype), np.empty((3, limit), alpha.dtype)
    for p in range(patches.shape[0]):
        counts[p], residual[p] = pursue_one_complex(
            energy_of(patches[p]), gram, limit, targets[p], alpha[p], power, lanes, q, z, index[p],
            values[p],
        )  # fmt: skip
