"""Least squares: min ||A x - d||^2 + damping * L ||x||^2, L the bound on A^H A.

Without damping the solution of minimum norm; for one channel that is the zero-filled image, and
"auto" is 0. With several channels "auto" is the noise energy of an image over its signal energy,
2 sigma^2 N / (||d||^2 - 2 sigma^2 M), which is Wiener's filter for an image without structure.
Conjugate gradients on the normal equations, plane by plane.
"""

from __future__ import annotations

import numpy as np

from mrics.encoding import Encoding, blocks
from mrics.encoding.acquisition import Acquisition
from mrics.recovery.contract import Certificate, Recovered
from mrics.recovery.plane import Array, each_plane, scale_unit
from mrics.recovery.settings import LeastSquares
from mrics.recovery.solvers import conjugate_gradients


def solve(acquisition: Acquisition, settings: LeastSquares, sigma: float) -> Recovered:
    """Recover every plane to the relative residual ``settings.tolerance``."""
    dtype = acquisition.kspace.dtype
    unit = dtype.type(scale_unit(acquisition))
    image = np.zeros(acquisition.shape, dtype)
    relative, rule = settings.damping, "given" if settings.damping else "none"
    if isinstance(relative, str):
        relative, rule = _noise_over_signal(acquisition, sigma), "auto: noise over signal energy"

    def one(
        _worker: None, encoding: Encoding, data: Array, i: int, plane: int
    ) -> tuple[int, float, float]:
        part = encoding.part(slice(i, i + 1))
        damping = dtype.type(relative * part.bound)
        right = part.adjoint(data[i : i + 1] / unit, overwrite=True)

        def normal(x: Array) -> Array:
            return part.normal(x) + damping * x

        x, done, change, residual = conjugate_gradients(
            normal, right, settings.iterations, settings.tolerance
        )
        image[plane] = x[0] * unit
        return done, change, residual

    ran = each_plane(acquisition, lambda: None, one)
    optimality = max(r[2] for r in ran)
    certificate = Certificate(
        "least-squares",
        iterations=max(r[0] for r in ran),
        final_change=max(r[1] for r in ran),
        optimality=optimality,
        tolerance=settings.tolerance,
        reached=optimality <= settings.tolerance,
        weight=relative,
        weight_unit="of the largest eigenvalue of A^H A",
        weight_rule=rule,
    )
    return Recovered(image, certificate)


def _noise_over_signal(acquisition: Acquisition, sigma: float) -> float:
    energy, samples = 0.0, 0
    for _, encoding, data in blocks(acquisition):
        if encoding.channels == 1:
            return 0.0
        data *= encoding.weights
        energy += float(np.vdot(data, data).real)
        planes, channels, u, v = encoding.out_shape
        samples += int(np.broadcast_to(encoding.mask, (planes, 1, u, v)).sum()) * channels
    noise = 2 * sigma**2
    signal = max(energy - noise * samples, 0.01 * energy)
    return noise * int(np.prod(acquisition.shape)) / signal if signal > 0 else 0.0
