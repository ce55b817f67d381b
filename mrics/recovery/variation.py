"""Total variation of the complex image, of first or second order.

Order 1, isotropic, periodic forward differences D (Rudin, Osher & Fatemi 1992):

    minimise  1/2 ||M F S x - d||^2 + weight sigma sum_pixels |(D x)|_2

Order 2, total generalised variation (Bredies, Kunisch & Pock 2010, doi:10.1137/090769521), E the
symmetrised periodic backward differences of a complex field w of two components and |.|_F the
Frobenius norm:

    minimise  1/2 ||M F S x - d||^2 + weight sigma min_w sum_pixels |D x - w|_2 + 2 |E w|_F

A linear slope costs nothing at order 2, so that shading is not made into steps. The factor 2 is
that of Knoll, Bredies, Pock & Stollberger 2011, doi:10.1002/mrm.22595 (from memory).

``phase = "smooth"``: with p the phase of the low-resolution image of the calibration region, x is
p times a real image, of either sign, over which the objective is minimised. This halves the
unknowns; where the true phase is not smooth (air, vessels, fat beside water) the part of the signal
out of phase with p is lost.
"""

from __future__ import annotations

from mrics.encoding.acquisition import Acquisition
from mrics.recovery.contract import Recovered
from mrics.recovery.convex import ITERATIONS, certify, joined, phase_note, run_planes
from mrics.recovery.penalties import Variation as VariationPenalty
from mrics.recovery.second_order import SecondOrder
from mrics.recovery.settings import Variation


def solve(acquisition: Acquisition, settings: Variation, sigma: float) -> Recovered:
    """Recover every plane; see the module for the objectives."""
    weight = float(settings.weight)
    image, results = run_planes(
        acquisition,
        VariationPenalty if settings.order == 1 else SecondOrder,
        weight * sigma,
        settings.iterations or ITERATIONS,
        settings.tolerance,
        phase=settings.phase,
    )
    note = joined("" if settings.order == 1 else "second order", phase_note(settings.phase))
    return certify("variation", image, results, settings.tolerance, weight, note)
