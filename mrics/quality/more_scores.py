"""Further scores of every plane: MS-SSIM, gradient deviation, worst patches."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import QualityError
from mrics.numerics import map_blocks
from mrics.quality._inputs import as_stack, largest, magnitude
from mrics.quality.gradients import gradient_deviation
from mrics.quality.multiscale import ms_ssim
from mrics.quality.patches import SIZE, worst_patch
from mrics.quality.similarity import ssim_map

Array = NDArray[Any]
MORE = ("ms_ssim", "gmsd", "nrmse_patch", "ssim_patch")


def more_scores_planes(
    image: Array,
    reference: Array,
    mask: NDArray[np.bool_] | None = None,
    data_range: float | None = None,
    *,
    patch: int = SIZE,
) -> list[dict[str, float | None]]:
    """Further scores of every plane, with one data range and one reference level for all.

    Parameters
    ----------
    image, reference, mask, data_range
        As for :func:`mrics.quality.score_planes`.
    patch : int
        Side of a patch in voxels.

    Returns
    -------
    list of dict
        ``ms_ssim``, ``gmsd``; ``nrmse_patch``, the largest RMS error of a patch over the RMS of the
        reference in the mask of the whole stack; ``ssim_patch``, the lowest mean SSIM of a patch.
        None in planes without mask voxels, and for patches where none is half inside the mask.

    Raises
    ------
    QualityError
        As for :func:`mrics.quality.score_planes`, and for a patch below 2 voxels.
    """
    stack, ref, inside = as_stack(image, reference, mask)
    span = largest(ref, inside) if data_range is None else float(data_range)
    if not span > 0.0 or patch < 2:
        raise QualityError(
            f"Data range {span:g} and patch {patch} voxels: the first must be positive, the second "
            "at least 2.",
            "data_range, patch",
            "Give the largest magnitude of the reference inside the body.",
        )
    level = _rms(ref, inside)

    def one(index: int) -> dict[str, float | None]:
        within = None if inside is None else inside[index]
        if within is not None and not within.any():
            return dict.fromkeys(MORE)
        a, b = magnitude(stack[index]), magnitude(ref[index])
        error = worst_patch((a - b) ** 2, within, lowest=False, size=patch)
        likeness = worst_patch(ssim_map(a, b, span), within, lowest=True, size=patch)
        return {
            "ms_ssim": ms_ssim(a, b, span, within),
            "gmsd": gradient_deviation(a, b, span, within),
            "nrmse_patch": error.value**0.5 / level if error and level > 0.0 else None,
            "ssim_patch": likeness.value if likeness else None,
        }

    return map_blocks(one, range(len(stack)))


def _rms(reference: Array, mask: NDArray[np.bool_] | None) -> float:
    total, count = 0.0, 0
    for index, plane in enumerate(reference):
        inside = np.ones(plane.shape, bool) if mask is None else mask[index]
        total += float((magnitude(plane) ** 2).sum(where=inside))
        count += int(inside.sum())
    return float(np.sqrt(total / count))
