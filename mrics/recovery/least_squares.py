"""Least squares: min ||A x - d||^2 + damping * L ||x||^2, L the bound on A^H A.

Without damping the solution of minimum norm; for one channel that is the zero-filled image.
Conjugate gradients on the normal equations, plane by plane.
"""

from __future__ import annotations

import numpy as np

from mrics.encoding import Encoding
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

    def one(
        _worker: None, encoding: Encoding, data: Array, i: int, plane: int
    ) -> tuple[int, float, float]:
        part = encoding.part(slice(i, i + 1))
        damping = dtype.type(settings.damping * part.bound)
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
        weight=settings.damping,
        weight_rule="given" if settings.damping else "none",
    )
    return Recovered(image, certificate)
