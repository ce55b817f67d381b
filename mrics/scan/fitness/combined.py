"""Root-sum-of-squares: several receive channels combined without phase."""

from __future__ import annotations

from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.levels import coarse_levels
from mrics.scan.fitness.view import ScanView
from mrics.scan.noise import channels_of_ratio

# Mean / SD of air: 1.91 for one channel, 2.75 for two; little signal in air raises it to 2.2.
RATIO = 2.35
LEAST_BLOCKS = 60


def root_sum_of_squares(view: ScanView) -> tuple[Finding, ...]:
    """Air of a magnitude scan whose mean / SD is that of a chi law of several channels."""
    ratio = view.noise.ratio
    air = view.noise_estimates.get("air")
    if air is None or air.blocks < LEAST_BLOCKS or view.has_phase:
        return ()
    if ratio <= RATIO or coarse_levels(view):
        return ()  # rounding to few levels narrows air too
    channels = channels_of_ratio(ratio)
    return (
        Finding(
            code="root-sum-of-squares",
            what=f"Air has mean / SD of {ratio:.2f} where one channel has 1.91: about "
            f"{channels:.1f} channels were combined by root sum of squares.",
            where="air",
            statistic=ratio,
            threshold=RATIO,
            bias="The combination is not linear and widens k-space beyond what was acquired; its "
            "noise floor hides aliasing.",
            advice="Use the channels themselves, or an adaptively combined complex image.",
        ),
    )
