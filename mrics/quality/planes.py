"""Which planes measures with further recoveries use, and whether what they insert fits there."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import QualityError
from mrics.quality.measures import Measures

Array = NDArray[Any]


def choose_planes(
    reference: Array,
    mask: NDArray[np.bool_] | None,
    measures: Measures,
    voxel_mm: tuple[float, float, float],
) -> tuple[int, ...]:
    """Planes spread over those that hold at least half as much of the mask as the fullest one.

    Features that reach over planes need neighbours: then it is one block around the fullest plane.

    Raises
    ------
    QualityError
        Where such a feature needs more planes than there are.
    """
    count = len(reference)
    area = np.full(count, 1.0) if mask is None else mask.sum(axis=(1, 2)).astype(float)
    reach = max((one.radii(voxel_mm)[0] for one in measures.features), default=0)
    if reach:
        length = max(measures.planes, 2 * reach + 1)
        if length > count:
            raise QualityError(
                f"A sphere reaches over {length} planes, the stack has {count}.",
                "[quality] features",
                "Study more planes, or use discs.",
            )
        first = int(np.clip(int(area.argmax()) - length // 2, 0, count - length))
        return tuple(range(first, first + length))
    full = np.flatnonzero(area >= 0.5 * area.max())
    take = np.linspace(0, full.size - 1, min(measures.planes, full.size) + 2)[1:-1]
    return tuple(sorted({int(full[round(float(at))]) for at in take}))


def check_regions(
    reference: Array,
    mask: NDArray[np.bool_],
    labels: Array | None,
    measures: Measures,
    voxel_mm: tuple[float, float, float],
) -> None:
    """Whether regions and features asked for fit a scan, before anything is recovered.

    Parameters
    ----------
    reference, mask, labels, voxel_mm
        As for :func:`mrics.quality.measure`.
    measures : Measures

    Raises
    ------
    QualityError
        For a background label that the map does not hold, and features larger than the region.
    """
    from mrics.quality.sites import choose_sites, tissue

    against = measures.background_label
    if labels is not None and against is not None and not (labels == against).any():
        raise QualityError(
            f"background_label = {against} is not in the label map; it holds "
            f"{[int(n) for n in np.unique(labels) if n]}.",
            "[quality] background_label",
            "Name a label of the studied slices.",
        )
    if measures.features:
        where = mask if labels is None else labels > 0
        chosen = list(choose_planes(reference, where, measures, voxel_mm))
        region = labels[chosen] if labels is not None else tissue(reference[chosen], mask[chosen])
        for radii in {feature.radii(voxel_mm) for feature in measures.features}:
            choose_sites(region, radii, 1)
