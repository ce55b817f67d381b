"""Air that was replaced by exact zeros: masked, or moved in from outside the field of view."""

from __future__ import annotations

import numpy as np
import scipy

from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.view import ScanView

# Share of air in solid blocks of zeros; rounding alone leaves far less than 1e-6.
SHARE = 0.01
# Up to this share, with noise in the rest, zeros are margins rather than a mask.
MARGIN = 0.6


def exact_zeros(view: ScanView) -> tuple[Finding, ...]:
    """Solid 3 x 3 blocks of exact zeros outside the body.

    Rounding to integers makes single zeros (12 % of Rayleigh air of sigma 1), but nine together
    only once in 10^8. Zeros in most of the air are a mask. Zeros in less of it that touch the
    border, while the rest of the air has noise, are margins: a shift, a rotation, or a correction
    of gradient distortion moved them in from outside the field of view.
    """
    outside = ~view.mask
    if not outside.any():
        return ()
    size = [3 if axis < 2 and view.volume.shape[axis] >= 3 else 1 for axis in range(3)]
    solid = outside & (scipy.ndimage.maximum_filter(view.magnitude, size, mode="nearest") == 0)
    air = np.count_nonzero(outside)
    share = float(np.count_nonzero(solid) / air)
    if share <= SHARE:
        return ()
    noisy = float(np.count_nonzero(outside & (view.magnitude > 0)) / air)
    return (_margin(share) if share < MARGIN and noisy > 1 - MARGIN else _mask(share),)


def _mask(share: float) -> Finding:
    return Finding(
        code="exact-zero-background",
        what=f"{share:.0%} of the air lies in solid areas of exact zeros: it was masked.",
        where="outside the body",
        statistic=share,
        threshold=SHARE,
        bias="The masked image is sparser than a measured one and its air hides aliasing and "
        "noise: every accelerated arm looks better than it is.",
        advice="Use the scan before masking; judge by the body region only, and add noise.",
        remedy="add_noise",
    )


def _margin(share: float) -> Finding:
    return Finding(
        code="zero-margins",
        what=f"{share:.0%} of the air is exactly zero in solid areas while the rest has noise: "
        "margins moved in by a shift, a rotation or a correction of distortion.",
        where="margins of the field of view",
        statistic=share,
        threshold=SHARE,
        bias="The grid is not the one that was measured: interpolation took fine detail and "
        "noise away, so undersampling looks better than it is.",
        advice="Use the scan before it was moved or corrected.",
    )
