"""Total variation of the complex image.

Order 1, isotropic, periodic forward differences D (Rudin, Osher & Fatemi 1992):

    minimise  1/2 ||M F S x - d||^2 + weight sigma sum_pixels |(D x)|_2
"""

from __future__ import annotations

from mrics.encoding.acquisition import Acquisition
from mrics.recovery.contract import Recovered
from mrics.recovery.convex import ITERATIONS, certify, run_planes
from mrics.recovery.penalties import Variation as VariationPenalty
from mrics.recovery.settings import Variation


def solve(acquisition: Acquisition, settings: Variation, sigma: float) -> Recovered:
    """Recover every plane; see the module for the objective."""
    weight, rule = settings.weight, "given"
    if isinstance(weight, str):
        weight, rule = 0.5, "auto: 0.5 sigma"
    image, results = run_planes(
        acquisition,
        VariationPenalty,
        weight * sigma,
        settings.iterations or ITERATIONS,
        settings.tolerance,
    )
    return certify("variation", image, results, settings.tolerance, weight, rule)
