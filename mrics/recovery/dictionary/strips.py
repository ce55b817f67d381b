"""Compiled denoising of a strip of patch positions: extract, code, put back, one patch at a time.

No code outlives its patch: memory does not grow with the number of patches.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.recovery.dictionary.kernels import (
    LANES,
    compiled,
    energy_of,
    pursue_one,
    pursue_one_complex,
)


@compiled
def _centre(image: Any, u: Any, v: Any, pu: Any, pv: Any, patch: Any, means: Any) -> None:
    """Patch of all layers at (u, v), real and imaginary rows, each layer's mean apart."""
    i = 0
    for layer in range(image.shape[0]):
        a, b = patch.dtype.type(0), patch.dtype.type(0)
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
    sides = 1 if turned else 2
    many = len(places)
    patches, means = np.empty((many, 2, length), kind), np.empty((many, 2, layers), kind)
    wanted = np.empty((sides * many, columns.shape[0]), kind)
    alpha = np.empty((sides * many, columns.shape[1]), kind)
    energies, slots = np.empty((many, sides)), np.empty((many, sides), np.int64)
    estimate, factors = np.empty((2, length), kind), np.empty(2, kind)
    power, lanes = np.empty(number, kind), np.empty(LANES, kind)
    # Two branches: a compiled function has one type for each name on each of them.
    if turned:  # noqa: SIM108
        q = np.empty((2, limit, number), kind)
    else:
        q = np.empty((limit, number), kind)
    z = np.empty((3, limit), kind)
    chosen, values = np.empty(limit, np.int32), np.empty((2, limit), kind)
    for row in range(len(rows)):
        u = rows[row]
        # One matrix product for the patches of a row that are to be coded.
        active = 0
        for place in range(many):
            patch = patches[place]
            _centre(image, u, places[place], pu, pv, patch, means[place])
            parts = patch.reshape(sides, -1)
            for part in range(sides):
                energy = energy_of(parts[part : part + 1])
                energies[place, part] = energy
                slots[place, part] = active
                if energy > target:
                    wanted[active] = parts[part]
                    active += 1
        if active > 0:
            np.dot(wanted[:active], columns, alpha[:active])
        for place in range(many):
            v = places[place]
            estimate[:, :] = 0
            used[row, place] = 0
            residual[row, place] = 0
            if turned:
                count, left = pursue_one_complex(
                    energies[place, 0], gram, limit, target, alpha[slots[place, 0]].reshape(2, -1),
                    power, lanes, q, z, chosen, values,
                )  # fmt: skip
                used[row, place] = count
                residual[row, place] = left
                factors[:] = 1 / (1.0 + count)
                for k in range(count):
                    use[chosen[k]] += 1
                    one, two = atoms[0, chosen[k]], atoms[1, chosen[k]]
                    a, b = values[0, k], values[1, k]
                    for i in range(length):
                        estimate[0, i] += a * one[i] - b * two[i]
                    for i in range(length):
                        estimate[1, i] += b * one[i] + a * two[i]
            else:
                for part in range(2):
                    slot = slots[place, part]
                    count, left = pursue_one(
                        energies[place, part], gram, limit, target, alpha[slot : slot + 1], power,
                        lanes, q, z, chosen, values[:1],
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
                            value = estimate[part, i] + means[place, part, layer]
                            out[layer, y, 2 * x + part] += factors[part] * value
                        i += 1
            for y in range(u, u + pu):
                for x in range(v, v + pv):
                    for part in range(2):
                        weight[y, 2 * x + part] += factors[part]
