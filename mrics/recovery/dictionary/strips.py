"""Compiled denoising of a strip of patch positions: extract, code, put back, one patch at a time.

No code outlives its patch: memory does not grow with the number of patches.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.recovery.dictionary.kernels import compiled, pursue_one, pursue_one_complex


@compiled
def _centre(image: Any, u: Any, v: Any, pu: Any, pv: Any, patch: Any, means: Any) -> None:
    """Patch of all layers at (u, v), real and imaginary rows, each layer's mean apart."""
    i = 0
    for layer in range(image.shape[0]):
        a, b = patch[0, 0] * 0, patch[0, 0] * 0
        start = i
        for y in range(u, u + pu):
            for x in range(v, v + pv):
                a += image[layer, y, 2 * x]
                b += image[layer, y, 2 * x + 1]
                patch[0, i] = image[layer, y, 2 * x]
                patch[1, i] = image[layer, y, 2 * x + 1]
                i += 1
        a /= pu * pv
        b /= pu * pv
        means[0, layer], means[1, layer] = a, b
        for k in range(start, i):
            patch[0, k] -= a
            patch[1, k] -= b


@compiled
def denoise_strip(
    image: Any,
    rows: Any,
    places: Any,
    size: Any,
    columns: Any,
    atoms: Any,
    gram: Any,
    limit: Any,
    target: Any,
    out: Any,
    weight: Any,
    use: Any,
    residual: Any,
    used: Any,
) -> None:
    """Accumulate denoised patches of a strip.

    ``image`` (layer, U, 2 V) holds alternating real and imaginary parts; patches of ``size`` (u, v)
    start at ``rows`` (within the strip) and ``places``. Real atoms (``gram`` of two axes) code the
    real and the imaginary part of a patch each on its own, complex ones both at once. ``atoms``
    (2, atom, n) (second half unused where real) synthesise. ``out`` (layer, U, 2 V) and ``weight``
    (U, 2 V) collect patches weighted by 1 / (1 + atoms), ``use`` counts atoms; ``residual`` and
    ``used`` (row, place) receive squared residuals and atoms of both parts together.
    """
    turned = gram.ndim == 3
    pu, pv = size
    layers = image.shape[0]
    length = layers * pu * pv
    number = gram.shape[-1]
    kind = image.dtype
    patch, estimate = np.empty((2, length), kind), np.empty((2, length), kind)
    means, factors = np.empty((2, layers), kind), np.empty(2, kind)
    alpha, power = np.empty((2, number), kind), np.empty(number, kind)
    # Two branches: a compiled function has one type for each name on each of them.
    if turned:  # noqa: SIM108
        q = np.empty((2, limit, number), kind)
    else:
        q = np.empty((limit, number), kind)
    z = np.empty((3, limit), kind)
    chosen, values = np.empty(limit, np.int32), np.empty((2, limit), kind)
    for row in range(len(rows)):
        for place in range(len(places)):
            u, v = rows[row], places[place]
            _centre(image, u, v, pu, pv, patch, means)
            estimate[:, :] = 0
            used[row, place] = 0
            residual[row, place] = 0
            if turned:
                count, left = pursue_one_complex(
                    patch, columns, gram, limit, target, alpha, power, q, z, chosen, values
                )
                used[row, place] = count
                residual[row, place] = left
                factors[:] = 1 / (1.0 + count)
                for k in range(count):
                    use[chosen[k]] += 1
                    one, two = atoms[0, chosen[k]], atoms[1, chosen[k]]
                    a, b = values[0, k], values[1, k]
                    for i in range(length):
                        estimate[0, i] += a * one[i] - b * two[i]
                        estimate[1, i] += b * one[i] + a * two[i]
            else:
                for part in range(2):
                    count, left = pursue_one(
                        patch[part : part + 1], columns, gram, limit, target, alpha, power, q, z,
                        chosen, values,
                    )  # fmt: skip
                    used[row, place] += count
                    residual[row, place] += left
                    factors[part] = 1 / (1.0 + count)
                    for k in range(count):
                        use[chosen[k]] += 1
                        one = atoms[0, chosen[k]]
                        a = values[0, k]
                        for i in range(length):
                            estimate[part, i] += a * one[i]
            i = 0
            for layer in range(layers):
                for y in range(u, u + pu):
                    for x in range(v, v + pv):
                        for part in range(2):
                            value = estimate[part, i] + means[part, layer]
                            out[layer, y, 2 * x + part] += factors[part] * value
                        i += 1
            for y in range(u, u + pu):
                for x in range(v, v + pv):
                    for part in range(2):
                        weight[y, 2 * x + part] += factors[part]
