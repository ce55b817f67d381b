"""Compiled loops of the recoveries: serial, without the interpreter lock, on one plane.

Complex planes come as float arrays ``(rows, 2 columns)`` of alternating real and imaginary parts,
which compilers vectorise. Sums run in the plane's precision along a row and in float64 over rows.
"""

from __future__ import annotations

from typing import Any

import numba
import numpy as np

compiled = numba.njit(
    nogil=True,
    cache=True,
    error_model="numpy",
    fastmath={"contract", "reassoc", "nsz", "arcp", "nnan"},
)


@compiled
def residual(spectrum: Any, data: Any, mask: Any) -> tuple[float, float]:
    """Spectrum = mask * spectrum - data; returns ||residual||^2 and Re<residual, data>.

    ``mask`` is real, ``(rows, columns)`` or ``(rows, 1)`` where whole rows are acquired; ``data``
    is zero outside it.
    """
    rows, width = spectrum.shape
    square = 0.0
    product = 0.0
    for i in range(rows):
        r2 = spectrum[0, 0] * 0
        rd = r2
        if mask.shape[1] == 1:
            m = mask[i, 0]
            for j in range(width):
                r = m * spectrum[i, j] - data[i, j]
                spectrum[i, j] = r
                r2 += r * r
                rd += r * data[i, j]
        else:
            for j in range(width // 2):
                m = mask[i, j]
                re = m * spectrum[i, 2 * j] - data[i, 2 * j]
                im = m * spectrum[i, 2 * j + 1] - data[i, 2 * j + 1]
                spectrum[i, 2 * j] = re
                spectrum[i, 2 * j + 1] = im
                r2 += re * re + im * im
                rd += re * data[i, 2 * j] + im * data[i, 2 * j + 1]
        square += r2
        product += rd
    return square, product


@compiled
def apply_map(image: Any, maps: Any, out: Any) -> None:
    """Out = maps * image on the grid of ``out`` (``image`` may be larger)."""
    rows, width = out.shape
    for i in range(rows):
        for j in range(width // 2):
            a, b = image[i, 2 * j], image[i, 2 * j + 1]
            c, d = maps[i, 2 * j], maps[i, 2 * j + 1]
            out[i, 2 * j] = a * c - b * d
            out[i, 2 * j + 1] = a * d + b * c


@compiled
def gather_map(channel: Any, maps: Any, out: Any, first: Any) -> None:
    """Out (+)= conj(maps) * channel, set where ``first``."""
    rows, width = channel.shape
    for i in range(rows):
        if first:
            for j in range(width):
                out[i, j] = 0
        for j in range(width // 2):
            a, b = channel[i, 2 * j], channel[i, 2 * j + 1]
            c, d = maps[i, 2 * j], maps[i, 2 * j + 1]
            out[i, 2 * j] += a * c + b * d
            out[i, 2 * j + 1] += b * c - a * d


@compiled
def shrink_step(
    point: Any,
    gradient: Any,
    current: Any,
    bands: Any,
    thresholds: Any,
    step: Any,
    momentum: Any,
    sums: Any,
) -> None:
    """One proximal gradient step with momentum, all in coefficient space, in place.

    new = shrink(point - step * gradient, step * threshold), by modulus;
    point = new + momentum * (new - current); current = new.

    Parameters
    ----------
    point, gradient, current : float array (rows, 2 columns)
        Where the gradient was taken; the gradient there; the last iterate.
    bands : int array (n, 4)
        Row and complex column ranges: first row, last row, first column, last column.
    thresholds : float array (n,)
        Threshold of each band; 0 leaves a band unpenalised.
    sums : float64 array (7,)
        Filled with: sum of threshold * |point|; largest |gradient| / threshold over penalised
        bands; ||gradient||^2 and ||point||^2 over unpenalised bands;
        Re<point - new, new - current>; ||new - current||^2; ||new||^2.
    """
    one_norm = 0.0
    excess = 0.0
    free_gradient = 0.0
    free_point = 0.0
    turn = 0.0
    change = 0.0
    norm = 0.0
    zero = point[0, 0] * 0
    top = np.empty(point.shape[1] // 2, point.dtype)  # running maxima per column vectorise
    one = np.ones(1, thresholds.dtype)[0]
    tiny = np.full(1, 1e-36, thresholds.dtype)[0]
    for band in range(bands.shape[0]):
        t = thresholds[band]
        cut = step * t
        top[:] = zero
        left, right = 2 * bands[band, 2], 2 * bands[band, 3]
        for i in range(bands[band, 0], bands[band, 1]):
            p = point[i, left:right]
            g = gradient[i, left:right]
            c = current[i, left:right]
            row_l1 = zero
            row_g = zero
            row_p = zero
            row_turn = zero
            row_change = zero
            row_norm = zero
            for j in range(len(p) // 2):
                pr, pi = p[2 * j], p[2 * j + 1]
                gr, gi = g[2 * j], g[2 * j + 1]
                cr, ci = c[2 * j], c[2 * j + 1]
                g2 = gr * gr + gi * gi
                p2 = pr * pr + pi * pi
                row_l1 += np.sqrt(p2)
                row_g += g2
                row_p += p2
                top[j] = max(top[j], g2)
                zr = pr - step * gr
                zi = pi - step * gi
                keep = one - min(one, cut / np.sqrt(zr * zr + zi * zi + tiny))
                nr = keep * zr
                ni = keep * zi
                dr = nr - cr
                di = ni - ci
                row_turn += (pr - nr) * dr + (pi - ni) * di
                row_change += dr * dr + di * di
                row_norm += nr * nr + ni * ni
                p[2 * j] = nr + momentum * dr
                p[2 * j + 1] = ni + momentum * di
                c[2 * j] = nr
                c[2 * j + 1] = ni
            if t > 0:
                one_norm += t * row_l1
            else:
                free_gradient += row_g
                free_point += row_p
            turn += row_turn
            change += row_change
            norm += row_norm
        if t > 0:
            excess = max(excess, np.sqrt(top.max()) / t)
    sums[0] = one_norm
    sums[1] = excess
    sums[2] = free_gradient
    sums[3] = free_point
    sums[4] = turn
    sums[5] = change
    sums[6] = norm


@compiled
def shrink(values: Any, bands: Any, thresholds: Any) -> None:
    """Shrink coefficients by modulus in place, band by band."""
    one = np.ones(1, thresholds.dtype)[0]
    tiny = np.full(1, 1e-36, thresholds.dtype)[0]
    for band in range(bands.shape[0]):
        cut = thresholds[band]
        if cut > 0:
            left, right = 2 * bands[band, 2], 2 * bands[band, 3]
            for i in range(bands[band, 0], bands[band, 1]):
                row = values[i, left:right]
                for j in range(len(row) // 2):
                    re, im = row[2 * j], row[2 * j + 1]
                    keep = one - min(one, cut / np.sqrt(re * re + im * im + tiny))
                    row[2 * j] = keep * re
                    row[2 * j + 1] = keep * im


@compiled
def shifted_step(point: Any, gradient: Any, step: Any, down: Any, right: Any, out: Any) -> None:
    """Out = (point - step * gradient), moved cyclically by ``down`` rows, ``right`` columns."""
    rows, width = point.shape
    split = width - 2 * right
    for i in range(rows):
        p, g = point[i], gradient[i]
        o = out[(i + down) % rows]
        o_right = o[2 * right :]
        for j in range(split):
            o_right[j] = p[j] - step * g[j]
        p_left, g_left = p[split:], g[split:]
        for j in range(2 * right):
            o[j] = p_left[j] - step * g_left[j]


@compiled
def shifted_momentum(
    moved: Any, down: Any, right: Any, momentum: Any, current: Any, point: Any, sums: Any
) -> None:
    """Take back the shift of ``moved``: new; point = new + momentum (new - current); current = new.

    ``sums`` (3,) is filled with ||new - current||^2, ||new||^2, Re<point - new, new - current>.
    """
    rows, width = point.shape
    split = width - 2 * right
    total_change = 0.0
    total_norm = 0.0
    total_turn = 0.0
    for i in range(rows):
        source = moved[(i + down) % rows]
        change = point[0, 0] * 0
        norm = change
        turn = change
        for part in range(2):
            at = 0 if part == 0 else split
            length = split if part == 0 else 2 * right
            s = source[2 * right :] if part == 0 else source
            c = current[i, at : at + length]
            p = point[i, at : at + length]
            for j in range(length):
                new = s[j]
                d = new - c[j]
                turn += (p[j] - new) * d
                change += d * d
                norm += new * new
                p[j] = new + momentum * d
                c[j] = new
        total_change += change
        total_norm += norm
        total_turn += turn
    sums[0] = total_change
    sums[1] = total_norm
    sums[2] = total_turn
