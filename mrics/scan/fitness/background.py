"""Air that was replaced by exact zeros."""

from __future__ import annotations

import numpy as np
from scipy import ndimage

from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.view import ScanView

# Share of air in solid blocks of zeros; rounding alone leaves far less than 1e-6.
SHARE = 0.01


def exact_zero_background(view: ScanView) -> tuple[Finding, ...]:
    """Solid 3 x 3 blocks of exact zeros outside the body.

    Rounding to integers makes single zeros (12 % of Rayleigh air of sigma 1), but nine together
    only once in 10^8.
    """
    outside = ~view.mask
    if not outside.any():
        return ()
    size = [3 if a in view.encoded[:2] and view.volume.shape[a] >= 3 else 1 for a in range(3)]
    solid = ndimage.maximum_filter(view.magnitude, size, mode="nearest") == 0
    share = float(np.count_nonzero(solid & outside) / np.count_nonzero(outside))
    if share <= SHARE:
        return ()
    return (
        Finding(
            code="exact-zero-background",
            what=f"{share:.0%} of the air lies in solid areas of exact zeros: it was masked.",
            where="outside the body",
            statistic=share,
            threshold=SHARE,
            bias="The masked image is sparser than a measured one and its air hides aliasing and "
            "noise: every accelerated arm looks better than it is.",
            advice="Use the scan before masking; judge by the body region only, and add noise.",
            remedy="add_noise",
        ),
    )
