"""Compiled orthogonal matching pursuit of patches, serial; callers spread chunks over threads.

Batch form (Rubinstein, Zibulevsky & Elad 2008) with the Gram matrix G = D^H D: nothing of patch
length is touched after the correlations. With the chosen atoms orthonormalised one by one into
e_1, e_2, ..., the rows q_t = D^H e_t hold the Cholesky factor of the chosen Gram block for free
(<d_j, e_t> = q_t[j]), so that one step is

    l^2 = G_jj - sum_t |q_t[j]|^2,   q_k = (G_:j - sum_t conj(q_t[j]) q_t) / l,
    z_k = a_j / l,   a <- a - z_k q_k,   ||r||^2 <- ||r||^2 - |z_k|^2.

Real atoms take several right sides that share their atoms (the real and imaginary part of a
complex patch, each with its own coefficient); complex atoms have kernels of their own, with real
and imaginary parts in separate arrays.
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
_BLOCK = 32
#: patches whose correlations are taken together
_TOGETHER = 8


@compiled
def _largest(power: Any) -> Any:
    """First place of the largest of numbers from 0 up; maxima of blocks keep it branch-free."""
    number = len(power)
    whole = number - number % _BLOCK
    best, at = power[0] * 0 - 1, 0
    for start in range(0, whole, _BLOCK):
        most = power[start]
        for n in range(start + 1, start + _BLOCK):
            most = power[n] if power[n] > most else most
        if most > best:
            best, at = most, start
    for n in range(at, min(at + _BLOCK, number)):
        if power[n] == best:
            at = n
            break
    for n in range(whole, number):
        if power[n] > best:
            best, at = power[n], n
    return at


@compiled
def _correlate(patch: Any, columns: Any, out: Any) -> None:
    """Make ``out`` the sum over samples i of patch[i] times row i of ``columns`` (sample, atom)."""
    length = len(patch)
    whole = length - length % 8
    for n in range(len(out)):
        out[n] = 0
    for i in range(0, whole, 8):
        a, b, c, d = patch[i], patch[i + 1], patch[i + 2], patch[i + 3]
        e, f, g, h = patch[i + 4], patch[i + 5], patch[i + 6], patch[i + 7]
        one, two, three, four = columns[i], columns[i + 1], columns[i + 2], columns[i + 3]
        five, six, seven, eight = columns[i + 4], columns[i + 5], columns[i + 6], columns[i + 7]
        for n in range(len(out)):
            near = a * one[n] + b * two[n] + c * three[n] + d * four[n]
            out[n] += near + (e * five[n] + f * six[n] + g * seven[n] + h * eight[n])
    for i in range(whole, length):
        a = patch[i]
        row = columns[i]
        for n in range(len(out)):
            out[n] += a * row[n]


@compiled
def pursue_one(
    patch: Any,
    columns: Any,
    gram: Any,
    limit: Any,
    target: Any,
    alpha: Any,
    power: Any,
    q: Any,
    z: Any,
    chosen: Any,
    values: Any,
) -> Any:
    """Code one patch of shape (sides, n) over real atoms; (atoms used, squared residual).

    ``chosen`` and ``values`` (sides, limit) receive the atoms and coefficients; the others are
    workspace. It stops at ``limit`` atoms or at a squared residual of ``target``.
    """
    energy = _energy(patch)
    if energy <= target or energy <= 0 or limit == 0:
        return 0, energy
    for r in range(patch.shape[0]):
        _correlate(patch[r], columns, alpha[r])
    own = values[: patch.shape[0]]
    return _follow(energy, gram, limit, target, alpha, power, q, z, chosen, own)


@compiled
def _energy(patch: Any) -> Any:
    energy = 0.0
    for r in range(patch.shape[0]):
        for i in range(patch.shape[1]):
            energy += patch[r, i] * patch[r, i]
    return energy


@compiled
def _follow(
    energy: Any,
    gram: Any,
    limit: Any,
    target: Any,
    alpha: Any,
    power: Any,
    q: Any,
    z: Any,
    chosen: Any,
    values: Any,
) -> Any:
    """Choose atoms one by one, given a patch's energy and its correlations ``alpha``."""
    sides, atoms = len(values), len(power)
    floor = 1e-12 * energy
    count = 0
    while count < limit and energy > target and energy > floor:
        row = alpha[0]
        for n in range(atoms):
            power[n] = row[n] * row[n]
        for r in range(1, sides):
            row = alpha[r]
            for n in range(atoms):
                power[n] += row[n] * row[n]
        j = _largest(power)
        if power[j] <= floor * 1e-3:
            break
        square = gram[j, j]
        for t in range(count):
            square -= q[t, j] * q[t, j]
        if square < _DEPENDENT:
            break
        scale = 1 / np.sqrt(square)
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
    patch: Any,
    columns: Any,
    gram: Any,
    limit: Any,
    target: Any,
    alpha: Any,
    power: Any,
    q: Any,
    z: Any,
    chosen: Any,
    values: Any,
) -> Any:
    """The same for complex atoms: real and imaginary parts along the first axis of all arrays.

    ``patch`` (2, n), ``columns`` (2, n, atoms), ``gram`` (2, atoms, atoms), ``q`` (2, limit,
    atoms), ``z`` (3, limit), ``values`` (2, limit).
    """
    atoms = len(power)
    energy = 0.0
    for r in range(2):
        for i in range(patch.shape[1]):
            energy += patch[r, i] * patch[r, i]
    floor = 1e-12 * energy
    if energy <= target or energy <= 0 or limit == 0:
        return 0, energy
    re, im = alpha[0], alpha[1]
    _correlate(patch[0], columns[0], re)
    _correlate(patch[1], columns[1], power)
    for n in range(atoms):
        re[n] += power[n]
    _correlate(patch[1], columns[0], im)
    _correlate(patch[0], columns[1], power)
    for n in range(atoms):
        im[n] -= power[n]
    count = 0
    while count < limit and energy > target and energy > floor:
        for n in range(atoms):
            power[n] = re[n] * re[n] + im[n] * im[n]
        j = _largest(power)
        if power[j] <= floor * 1e-3:
            break
        square = gram[0, j, j]
        for t in range(count):
            square -= q[0, t, j] * q[0, t, j] + q[1, t, j] * q[1, t, j]
        if square < _DEPENDENT:
            break
        scale = 1 / np.sqrt(square)
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
    columns: Any,
    gram: Any,
    limit: Any,
    targets: Any,
    index: Any,
    values: Any,
    counts: Any,
    residual: Any,
) -> None:
    """Code (patch, side, n) over real atoms: index (patch, limit), values (patch, side, limit)."""
    sides, atoms = patches.shape[1], columns.shape[1]
    kind = patches.dtype
    alpha = np.empty((_TOGETHER, sides, atoms), kind)
    power = np.empty(atoms, kind)
    q = np.empty((limit, atoms), kind)
    z = np.empty((sides + 1, limit), kind)
    for start in range(0, patches.shape[0], _TOGETHER):
        stop = min(start + _TOGETHER, patches.shape[0])
        _correlate_some(patches[start:stop], columns, alpha)
        for p in range(start, stop):
            energy = _energy(patches[p])
            counts[p], residual[p] = 0, energy
            if energy > targets[p] and energy > 0:
                counts[p], residual[p] = _follow(
                    energy, gram, limit, targets[p], alpha[p - start], power, q, z, index[p],
                    values[p],
                )  # fmt: skip


@compiled
def _correlate_some(patches: Any, columns: Any, out: Any) -> None:
    """Correlations of a few patches: a row of ``columns`` serves all of them while in cache."""
    length = patches.shape[2]
    whole = length - length % 4
    out[:] = 0
    for i in range(0, whole, 4):
        one, two, three, four = columns[i], columns[i + 1], columns[i + 2], columns[i + 3]
        for p in range(patches.shape[0]):
            for r in range(patches.shape[1]):
                patch, row = patches[p, r], out[p, r]
                a, b, c, d = patch[i], patch[i + 1], patch[i + 2], patch[i + 3]
                for n in range(len(row)):
                    row[n] += a * one[n] + b * two[n] + c * three[n] + d * four[n]
    for i in range(whole, length):
        one = columns[i]
        for p in range(patches.shape[0]):
            for r in range(patches.shape[1]):
                row, a = out[p, r], patches[p, r, i]
                for n in range(len(row)):
                    row[n] += a * one[n]


@compiled
def pursue_rows_complex(
    patches: Any,
    columns: Any,
    gram: Any,
    limit: Any,
    targets: Any,
    index: Any,
    values: Any,
    counts: Any,
    residual: Any,
) -> None:
    """The same for complex atoms; shapes as in :func:`pursue_one_complex`."""
    atoms = columns.shape[2]
    kind = patches.dtype
    alpha = np.empty((2, atoms), kind)
    power = np.empty(atoms, kind)
    q = np.empty((2, limit, atoms), kind)
    z = np.empty((3, limit), kind)
    for p in range(patches.shape[0]):
        counts[p], residual[p] = pursue_one_complex(
            patches[p], columns, gram, limit, targets[p], alpha, power, q, z, index[p], values[p]
        )
