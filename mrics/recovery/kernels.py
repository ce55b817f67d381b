"""Compiled loops of the recoveries: serial, without the interpreter lock, on one plane.

Complex planes come as float arrays ``(rows, 2 columns)`` of alternating real and imaginary parts,
which compilers vectorise. Sums run in the plane's precision along a row and in float64 over rows.
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
        r2 = spectrum.dtype.type(0)
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
def solve_samples(spectrum: Any, data: Any, mask: Any, symbol: Any) -> tuple[float, float]:
    """Spectrum = (data + spectrum) / (mask + symbol); ||residual||^2 and Re<residual, data> after.

    ``mask`` is ``(rows, columns)`` or ``(rows, 1)``, and so is ``symbol``, or ``(1, 1)``.
    """
    rows, width = spectrum.shape
    one = spectrum.dtype.type(1)
    square = 0.0
    product = 0.0
    one_mask = mask.shape[1] == 1
    one_symbol = symbol.shape[1] == 1
    for i in range(rows):
        r2 = spectrum.dtype.type(0)
        rd = r2
        s = spectrum[i]
        d = data[i]
        if one_symbol and one_mask:
            m = mask[i, 0]
            scale = one / (m + symbol[i if symbol.shape[0] > 1 else 0, 0])
            for j in range(width):
                x = scale * (d[j] + s[j])
                r = m * x - d[j]
                s[j] = x
                r2 += r * r
                rd += r * d[j]
        else:
            y = symbol[i if symbol.shape[0] > 1 else 0]
            k = mask[i]
            m = k[0]
            t = y[0]
            for j in range(width // 2):
                if not one_mask:
                    m = k[j]
                if not one_symbol:
                    t = y[j]
                scale = one / (m + t)
                re = scale * (d[2 * j] + s[2 * j])
                im = scale * (d[2 * j + 1] + s[2 * j + 1])
                s[2 * j] = re
                s[2 * j + 1] = im
                re = m * re - d[2 * j]
                im = m * im - d[2 * j + 1]
                r2 += re * re + im * im
                rd += re * d[2 * j] + im * d[2 * j + 1]
        square += r2
        product += rd
    return square, product


@compiled
def solve_followed(
    spectrum: Any, state: Any, data: Any, mask: Any, rho: Any, relax: Any
) -> tuple[float, float, float]:
    """:func:`solve_samples` for a number ``rho``, keeping the spectrum V of the penalty's state v.

    On entry ``spectrum`` is rho times that of h = 2 z - v, so that Z = (spectrum / rho + V) / 2;
    with X the result, V moves on by relax (X - Z). Returns ||mask Z - data||^2 besides.
    """
    rows, width = spectrum.shape
    one = spectrum.dtype.type(1)
    half = spectrum.dtype.type(0.5)
    over = half / rho
    one_mask = mask.shape[1] == 1
    square = 0.0
    product = 0.0
    shrunk = 0.0
    for i in range(rows):
        r2 = spectrum.dtype.type(0)
        rd = r2
        z2 = r2
        s, v, d, k = spectrum[i], state[i], data[i], mask[i]
        if one_mask:
            m = k[0]
            scale = one / (m + rho)
            for j in range(width):
                z = over * s[j] + half * v[j]
                x = scale * (d[j] + s[j])
                s[j] = x
                v[j] += relax * (x - z)
                z = m * z - d[j]
                z2 += z * z
                x = m * x - d[j]
                r2 += x * x
                rd += x * d[j]
        else:
            for j in range(width // 2):
                m = k[j]
                scale = one / (m + rho)
                zr = over * s[2 * j] + half * v[2 * j]
                zi = over * s[2 * j + 1] + half * v[2 * j + 1]
                xr = scale * (d[2 * j] + s[2 * j])
                xi = scale * (d[2 * j + 1] + s[2 * j + 1])
                s[2 * j] = xr
                s[2 * j + 1] = xi
                v[2 * j] += relax * (xr - zr)
                v[2 * j + 1] += relax * (xi - zi)
                zr = m * zr - d[2 * j]
                zi = m * zi - d[2 * j + 1]
                z2 += zr * zr + zi * zi
                xr = m * xr - d[2 * j]
                xi = m * xi - d[2 * j + 1]
                r2 += xr * xr + xi * xi
                rd += xr * d[2 * j] + xi * d[2 * j + 1]
        square += r2
        product += rd
        shrunk += z2
    return square, product, shrunk


@compiled
def split_samples(
    spectrum: Any, state: Any, data: Any, mask: Any, mu: Any, relax: Any, sums: Any
) -> None:
    """One channel's half of the splitting u = F S x, in k-space and in place.

    With V = ``state`` and U = (data + mu V) / (mask + mu) the minimiser of its data term,
    ``spectrum`` = F S x becomes 2 U' - V' for V' = V + relax * (spectrum - U).

    ``sums`` (4,) gains ||mask F S x - data||^2, and for p = mu (F S x - 2 U + V): ||p||^2 and
    Re<p, data> over acquired samples, ||p||^2 over the others.
    """
    rows, width = spectrum.shape
    one = spectrum.dtype.type(1)
    for i in range(rows):
        r2 = spectrum.dtype.type(0)
        p2 = r2
        pd = r2
        off = r2
        g = spectrum[i]
        v = state[i]
        d = data[i]
        k = mask[i]
        m = k[0]
        for j in range(width // 2):
            if mask.shape[1] > 1:
                m = k[j]
            scale = one / (m + mu)
            for part in range(2):
                at = 2 * j + part
                x = g[at]
                old = v[at]
                data_here = d[at]
                u = scale * (data_here + mu * old)
                p = mu * (x - u - u + old)
                r = m * x - data_here
                r2 += r * r
                p2 += m * p * p
                pd += m * p * data_here
                off += (one - m) * p * p
                new = old + relax * (x - u)
                v[at] = new
                fresh = scale * (data_here + mu * new)
                g[at] = fresh + fresh - new
        sums[0] += r2
        sums[1] += p2
        sums[2] += pd
        sums[3] += off


@compiled
def blend(image: Any, gathered: Any, last: Any, gap: Any, mu: Any, scale: Any) -> None:
    """Image = scale * (image + mu * (gathered + gap * last)), ``gap`` real (rows, columns)."""
    rows, width = image.shape
    for i in range(rows):
        x, g, o, w = image[i], gathered[i], last[i], gap[i]
        for j in range(width // 2):
            x[2 * j] = scale * (x[2 * j] + mu * (g[2 * j] + w[j] * o[2 * j]))
            x[2 * j + 1] = scale * (x[2 * j + 1] + mu * (g[2 * j + 1] + w[j] * o[2 * j + 1]))


@compiled
def divide_symbol(spectrum: Any, symbol: Any, plus: Any) -> None:
    """Spectrum /= symbol + plus, ``symbol`` real (rows, columns)."""
    rows, width = spectrum.shape
    one = spectrum.dtype.type(1)
    for i in range(rows):
        s, t = spectrum[i], symbol[i]
        for j in range(width // 2):
            scale = one / (t[j] + plus)
            s[2 * j] *= scale
            s[2 * j + 1] *= scale


@compiled
def replace_last(image: Any, gap: Any, last: Any) -> float:
    """Last = image; returns ||gap * (image - last)||^2 of before."""
    rows, width = image.shape
    total = 0.0
    for i in range(rows):
        x, o, w = image[i], last[i], gap[i]
        row = image.dtype.type(0)
        for j in range(width // 2):
            re = w[j] * (x[2 * j] - o[2 * j])
            im = w[j] * (x[2 * j + 1] - o[2 * j + 1])
            row += re * re + im * im
            o[2 * j] = x[2 * j]
            o[2 * j + 1] = x[2 * j + 1]
        total += row
    return total


@compiled
def shrink(values: Any, bands: Any, thresholds: Any) -> None:
    """Shrink coefficients by modulus in place, band by band."""
    one = thresholds.dtype.type(1)
    tiny = thresholds.dtype.type(1e-36)
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
        change = point.dtype.type(0)
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
