"""Values below zero in what should be a magnitude image."""

from __future__ import annotations

import numpy as np

from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.view import ScanView

# Share of voxels; a magnitude has none at all, so this only spares a stray rounded value.
SHARE = 1e-5


def negative_values(view: ScanView) -> tuple[Finding, ...]:
    """A scan without phase holds negative values: interpolation of higher order overshoots.

    Values nearer to zero than 10^-6 of the largest are rounding.
    """
    if view.has_phase:
        return ()
    least = -1e-6 * float(view.magnitude.max())
    share = float(np.count_nonzero(view.volume < least) / view.volume.size)
    if share <= SHARE:
        return ()
    return (
        Finding(
            code="resampled",
            what=f"{share:.2%} of the voxels are negative, which no magnitude is: interpolation "
            "of higher order overshot, or this is a real part.",
            where="values below zero",
            statistic=share,
            threshold=SHARE,
            bias="Interpolation took fine detail and noise away: less is left to lose, so "
            "undersampling looks better than on measured data.",
            advice="Use the scan before registration, rotation or reslicing; give a real part "
            "together with its imaginary part.",
            remedy="add_noise",
        ),
    )
