"""Where the body is: the region over which a scan is scored."""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy
from numpy.typing import NDArray

from mrics.errors import ScanError
from mrics.numerics.scaling import usual_size
from mrics.scan.volume import Scan

# Share of the mean tissue magnitude below which a voxel counts as air.
TISSUE_SHARE = 0.12
# Times the median of air: after the 3 x 3 x 3 mean, air exceeds 1.5 in 5 of 10^5 voxels.
AIR_FACTOR = 1.5
# A dark class brighter than this share of the bright one is tissue: the volume has no air.
AIR_SHARE = 0.35
_BINS = 512


def body_mask(volume: Scan | NDArray[Any]) -> NDArray[np.bool_]:
    """Voxels inside the body, holes filled.

    The magnitude (root sum of squares over channels, mean over frames) is smoothed by a
    3 x 3 x 3 mean and split by Otsu's criterion on its square root. Voxels above 0.12 x the mean
    of the bright class and, where the dark class is air (its median below 0.35 x that mean), above
    1.5 x its median are kept; of these, the
    connected parts of at least 1 % of the largest; holes are filled in three dimensions and in
    every plane along each axis.

    Parameters
    ----------
    volume : Scan or ndarray of shape (i, j, k), (i, j, k, frame) or (i, j, k, frame, channel)
        Real or complex.

    Returns
    -------
    ndarray of bool, shape (i, j, k)
        True everywhere in a volume that has no air.
    """
    data = volume.data if isinstance(volume, Scan) else np.asarray(volume)
    magnitude = spatial_magnitude(usual_size(data)[0])
    # The filter's running sums can leave -1e-7 where all is zero.
    smooth = np.maximum(scipy.ndimage.uniform_filter(magnitude, 3, mode="nearest"), 0)
    level = _otsu(np.sqrt(smooth)) ** 2
    bright = smooth > level
    dark = smooth[~bright]
    tissue = float(smooth[bright].mean())
    threshold = TISSUE_SHARE * tissue
    air = float(np.median(dark)) if dark.size else 0.0
    if air < AIR_SHARE * tissue:
        threshold = max(threshold, min(AIR_FACTOR * air, level))
    mask = smooth > threshold
    return _fill(_large_parts(_opened(mask), mask))


def spatial_magnitude(volume: Scan | NDArray[Any]) -> NDArray[np.float32]:
    """Magnitude of shape (i, j, k): root sum of squares over channels, mean over frames."""
    data = volume.data if isinstance(volume, Scan) else np.asarray(volume)
    if data.ndim not in (3, 4, 5):
        raise ScanError(
            f"A volume of {data.ndim} axes (shape {data.shape}) has no body mask.",
            "volume",
            "Give (i, j, k), with frames and channels after them.",
        )
    magnitude = np.abs(data).astype(np.float32, copy=False)
    if magnitude.ndim == 5:
        magnitude = np.sqrt(np.square(magnitude).sum(axis=4))
    if magnitude.ndim == 4:
        magnitude = magnitude.mean(axis=3, dtype=np.float32)
    return magnitude


def _otsu(values: NDArray[Any]) -> float:
    """Threshold that maximises the between-class variance (Otsu 1979, IEEE Trans. SMC 9:62)."""
    low, high = float(values.min()), float(values.max())
    if high - low <= 1e-5 * high:
        return 0.9 * low
    counts, edges = np.histogram(values, bins=_BINS, range=(low, high))
    centres = (edges[1:] + edges[:-1]) / 2
    below = np.cumsum(counts, dtype=np.float64)
    moment = np.cumsum(counts * centres, dtype=np.float64)
    total, mean = below[-1], moment[-1] / below[-1]
    above = total - below
    inside = (below > 0) & (above > 0)
    if not inside.any():
        return float(edges[0])
    between = np.zeros(_BINS)
    between[inside] = (moment[inside] - mean * below[inside]) ** 2 / (below * above)[inside]
    return float(edges[1:][int(np.argmax(between))])


def _opened(mask: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Thin bridges and specks removed; the volume's border counts as body."""
    if min(mask.shape) < 3:
        return mask
    return scipy.ndimage.binary_dilation(scipy.ndimage.binary_erosion(mask, border_value=1)) & mask


def _large_parts(opened: NDArray[np.bool_], whole: NDArray[np.bool_]) -> NDArray[np.bool_]:
    labels, count = scipy.ndimage.label(opened)
    if count == 0:
        return whole
    sizes = np.bincount(labels.ravel())
    sizes[0] = 0
    keep = sizes >= 0.01 * sizes.max()
    return keep[labels]


def _fill(mask: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Air that does not reach the border is body: in space, then in planes along each axis."""
    mask = ~_reaches_border(~mask, scipy.ndimage.generate_binary_structure(3, 1), (0, 1, 2))
    for axis in range(3):
        structure = scipy.ndimage.generate_binary_structure(3, 1)
        np.moveaxis(structure, axis, 0)[[0, 2]] = False
        borders = tuple(a for a in range(3) if a != axis)
        if min(mask.shape[a] for a in borders) > 2:
            mask = ~_reaches_border(~mask, structure, borders)
    return mask


def _reaches_border(
    air: NDArray[np.bool_], structure: NDArray[np.bool_], axes: tuple[int, ...]
) -> NDArray[np.bool_]:
    labels, count = scipy.ndimage.label(air, structure)
    outside = np.zeros(count + 1, dtype=bool)
    for axis in axes:
        for end in (0, -1):
            outside[np.unique(np.take(labels, end, axis=axis))] = True
    outside[0] = False
    return outside[labels]
