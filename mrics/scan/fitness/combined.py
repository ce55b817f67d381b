"""Root-sum-of-squares: several receive channels combined without phase."""

from __future__ import annotations

from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.levels import coarse_levels
from mrics.scan.fitness.view import ScanView
from mrics.scan.noise import RATIO_SLACK, RAYLEIGH_RATIO, channels_of_ratio


def root_sum_of_squares(view: ScanView) -> tuple[Finding, ...]:
    """Air of a magnitude scan whose mean / SD is that of a chi law of several channels."""
    ratio = view.noise.ratio
    threshold = (1 + RATIO_SLACK) * RAYLEIGH_RATIO
    if ratio <= threshold or view.has_phase or coarse_levels(view):
        return ()  # rounding to few levels narrows air too
    channels = channels_of_ratio(ratio)
    return (
        Finding(
            code="root-sum-of-squares",
            what=f"Air has mean / SD of {ratio:.2f} where one channel has 1.91: about "
            f"{channels:.1f} channels were combined by root sum of squares.",
            where="air",
            statistic=ratio,
            threshold=threshold,
            bias="The combination is not linear and widens k-space beyond what was acquired; its "
            "noise floor hides aliasing.",
            advice="Use the channels themselves, or an adaptively combined complex image.",
        ),
    )
