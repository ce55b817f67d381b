"""Compiled halves of the splitting for second-order variation; conventions of ``kernels``.

Bands of (x, w): forward differences of x less w (2), and the symmetrised backward derivative of w
(3: both diagonal terms, sqrt 2 times the mixed one, so that its modulus is the tensor's). Periodic.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.recovery.group_kernels import (
    add_squares,
    dual_row,
    move_row,
    raise_top,
    sums_of,
    to_factors,
)
from mrics.recovery.kernels import compiled


@compiled
def _wrapped(row: Any, out: Any) -> None:
    """``row`` with its last complex sample before it and its first after it."""
    width = len(row)
    out[2 : 2 + width] = row
    out[0], out[1] = row[width - 2], row[width - 1]
    out[width + 2], out[width + 3] = row[0], row[1]


@compiled
def _shrink_together(
    state: Any, i: Any, bands: Any, cut: Any, rho: Any, relax: Any, top: Any, dual: Any,
    factor: Any, c2: Any, q2: Any,
) -> Any:  # fmt: skip
    """One row of some bands, shrunk by their joint modulus.

    ``dual`` holds K x on entry, rho h on return; the state moves. Gives the sums of |K x|,
    |K x - z|^2 and |K x|^2; ``top`` gains the largest |K x - h|^2.
    """
    change = 0.0
    for b in bands:
        add_squares(state[b, i], b == bands[0], factor)
        add_squares(dual[b, i], b == bands[0], c2)
    to_factors(factor, cut)
    for b in bands:
        change += move_row(state[b, i], dual[b, i], factor, relax, b == bands[0], q2)
    for b in bands:
        add_squares(state[b, i], b == bands[0], factor)
    to_factors(factor, cut)
    for b in bands:
        dual_row(state[b, i], factor, rho, dual[b, i])
    raise_top(q2, top)
    norm1, norm = sums_of(c2)
    return norm1, change, norm


@compiled
def push_second(
    image: Any, field: Any, state: Any, dual: Any, weights: Any, rhos: Any, relax: Any, sums: Any
) -> None:
    """Bands of x = ``image`` and w = ``field`` (2, rows, 2 columns); their state moves.

    ``dual`` (5, rows, 2 columns) is left as rho h. ``sums`` (6,) as for
    :func:`penalty_kernels.split_bands`.
    """
    rows, width = image.shape
    half = image.dtype.type(np.sqrt(0.5))
    x = np.empty(width + 4, image.dtype)
    w = np.empty((2, width + 4), image.dtype)
    top = np.zeros((2, width // 2), image.dtype)
    factor, c2, q2 = np.empty_like(top[0]), np.empty_like(top[0]), np.empty_like(top[0])
    sums[:] = 0
    for i in range(rows):
        below = image[(i + 1) % rows]
        above = (i - 1) % rows
        _wrapped(image[i], x)
        _wrapped(field[0, i], w[0])
        _wrapped(field[1, i], w[1])
        over_0, over_1 = field[0, above], field[1, above]
        for j in range(width):
            here, here_0, here_1 = x[j + 2], w[0, j + 2], w[1, j + 2]
            dual[0, i, j] = below[j] - here - here_0
            dual[1, i, j] = x[j + 4] - here - here_1
            dual[2, i, j] = here_0 - over_0[j]
            dual[3, i, j] = here_1 - w[1, j]
            dual[4, i, j] = half * (here_0 - w[0, j] + here_1 - over_1[j])
        a, b, c = _shrink_together(
            state, i, (0, 1), weights[0] / rhos[0], rhos[0], relax, top[0], dual, factor, c2, q2,
        )  # fmt: skip
        d, e, f = _shrink_together(
            state, i, (2, 3, 4), weights[1] / rhos[1], rhos[1], relax, top[1], dual, factor, c2,
            q2,
        )  # fmt: skip
        sums[0] += weights[0] * a + weights[1] * d
        sums[4] += b + e
        sums[5] += c + f
    for order in range(2):
        sums[1] = max(sums[1], rhos[order] * np.sqrt(top[order].max()) / weights[order])


@compiled
def _add_along(row: Any, factor: Any, ahead: Any, out: Any) -> None:
    """Out += factor * (row - row one sample ahead), or (row one sample before - row)."""
    width = len(row)
    if ahead:
        for j in range(width - 2):
            out[j] += factor * (row[j] - row[j + 2])
        for j in range(2):
            out[width - 2 + j] += factor * (row[width - 2 + j] - row[j])
    else:
        for j in range(2, width):
            out[j] += factor * (row[j - 2] - row[j])
        for j in range(2):
            out[j] += factor * (row[width - 2 + j] - row[j])


@compiled
def pull_second(dual: Any, image: Any, field: Any) -> None:
    """Adjoint of the bands: the x part to ``image``, the w part to ``field``."""
    rows, width = image.shape
    one = image.dtype.type(1)
    half = image.dtype.type(np.sqrt(0.5))
    for i in range(rows):
        above, below = (i - 1) % rows, (i + 1) % rows
        for j in range(width):
            image[i, j] = dual[0, above, j] - dual[0, i, j]
            field[0, i, j] = dual[2, i, j] - dual[2, below, j] - dual[0, i, j]
            field[1, i, j] = half * (dual[4, i, j] - dual[4, below, j]) - dual[1, i, j]
        _add_along(dual[1, i], one, False, image[i])
        _add_along(dual[4, i], half, True, field[0, i])
        _add_along(dual[3, i], one, True, field[1, i])


@compiled
def _inverse(r: Any, c: Any, pr: Any, pi: Any, qr: Any, qi: Any, rhos: Any, one: Any) -> Any:
    """(rho_1 I + rho_2 E^H E)^-1 (p, q) at a frequency; r, c: its two difference symbols."""
    half = rhos[2]
    r2, c2 = r[0] * r[0] + r[1] * r[1], c[0] * c[0] + c[1] * c[1]
    a = rhos[0] + rhos[1] * r2 + half * c2
    b = rhos[0] + rhos[1] * c2 + half * r2
    mr = half * (c[0] * r[0] + c[1] * r[1])  # conj(c) r
    mi = half * (c[0] * r[1] - c[1] * r[0])
    scale = one / (a * b - mr * mr - mi * mi)
    return (
        scale * (b * pr - mr * qr + mi * qi),
        scale * (b * pi - mr * qi - mi * qr),
        scale * (a * qr - mr * pr - mi * pi),
        scale * (a * qi - mr * pi + mi * pr),
    )


@compiled
def eliminate(field: Any, down: Any, right: Any, rhos: Any, out: Any) -> None:
    """Out = rho_1 D^H (rho_1 I + rho_2 E^H E)^-1 field, all in k-space.

    ``down`` (rows, 2) and ``right`` (columns, 2): symbols b of the backward differences; those of
    the forward ones are -conj(b). ``rhos`` holds rho_1, rho_2 and half of rho_2.
    """
    rows, width = out.shape
    one = out.dtype.type(1)
    for i in range(rows):
        r, p, q, o = down[i], field[0, i], field[1, i], out[i]
        for j in range(width // 2):
            c = right[j]
            pr, pi, qr, qi = _inverse(
                r, c, p[2 * j], p[2 * j + 1], q[2 * j], q[2 * j + 1], rhos, one
            )
            o[2 * j] = -rhos[0] * (r[0] * pr - r[1] * pi + c[0] * qr - c[1] * qi)
            o[2 * j + 1] = -rhos[0] * (r[0] * pi + r[1] * pr + c[0] * qi + c[1] * qr)


@compiled
def substitute(spectrum: Any, field: Any, down: Any, right: Any, rhos: Any) -> None:
    """Field = (rho_1 I + rho_2 E^H E)^-1 (field + rho_1 D spectrum), all in k-space."""
    rows, width = spectrum.shape
    one = spectrum.dtype.type(1)
    for i in range(rows):
        r, p, q, x = down[i], field[0, i], field[1, i], spectrum[i]
        for j in range(width // 2):
            c = right[j]
            xr, xi = rhos[0] * x[2 * j], rhos[0] * x[2 * j + 1]
            pr, pi, qr, qi = _inverse(
                r, c,
                p[2 * j] - r[0] * xr - r[1] * xi,
                p[2 * j + 1] - r[0] * xi + r[1] * xr,
                q[2 * j] - c[0] * xr - c[1] * xi,
                q[2 * j + 1] - c[0] * xi + c[1] * xr,
                rhos, one,
            )  # fmt: skip
            p[2 * j], p[2 * j + 1], q[2 * j], q[2 * j + 1] = pr, pi, qr, qi
