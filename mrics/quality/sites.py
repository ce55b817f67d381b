"""Where features go: inside tissue, apart from each other, chosen by seed or given."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import QualityError
from mrics.numerics import stream

Array = NDArray[Any]
Radii = tuple[int, int, int]


def choose_sites(
    region: Array, radii: Radii, count: int, *, seed: int = 0, planes: Array | None = None
) -> NDArray[np.intp]:
    """Sites by seed whose boxes lie in the region and do not overlap.

    Parameters
    ----------
    region : ndarray of shape (plane, u, v), bool or integer
        Where features may lie: a mask, or a label map (0 is outside; a feature's box must lie in
        one label).
    radii : tuple of int
        Half sizes of a feature's box along (plane, u, v), so that it holds ``2 r + 1`` voxels.
    count : int
        Sites wanted; fewer are returned where the region holds no more.
    seed : int
    planes : sequence of int, optional
        Planes the sites' middles may lie in; all if left out.

    Returns
    -------
    ndarray of int, shape (n, 3)
        At least one.

    Raises
    ------
    QualityError
        Where the feature is larger than the region.
    """
    from scipy.ndimage import maximum_filter, minimum_filter

    labels = np.asarray(region).astype(np.int32)
    size = tuple(2 * r + 1 for r in radii)
    least = minimum_filter(labels, size, mode="constant", cval=0)
    fits = least > 0
    if labels.max() > 1:
        fits &= least == maximum_filter(labels, size, mode="constant", cval=0)
    if planes is not None:
        allowed = np.zeros(labels.shape[0], dtype=bool)
        allowed[np.asarray(planes, dtype=np.intp)] = True
        fits &= allowed[:, None, None]
    candidates = np.argwhere(fits)
    if candidates.size == 0:
        raise QualityError(
            f"A feature whose box is {size} voxels (plane, u, v) is larger than the region.",
            "features, region",
            "Use smaller features, or a larger region.",
        )
    candidates = candidates[stream(seed, "feature sites").permutation(len(candidates))]
    free = np.ones(len(candidates), dtype=bool)
    chosen: list[Array] = []
    while len(chosen) < count and free.any():
        site = candidates[int(free.argmax())]
        chosen.append(site)
        free &= (np.abs(candidates - site) > 2 * np.array(radii)).any(axis=1)
    return np.array(chosen, dtype=np.intp)


def check_sites(sites: Array, shape: tuple[int, ...], radii: Radii) -> NDArray[np.intp]:
    """Given sites, checked to lie in the stack with their boxes apart.

    Raises
    ------
    QualityError
        For boxes that reach outside the stack or overlap; the sites are named.
    """
    given = np.asarray(sites, dtype=np.intp).reshape(-1, 3)
    reach = np.array(radii)
    outside = ((given - reach < 0) | (given + reach >= np.array(shape))).any(axis=1)
    if outside.any() or given.size == 0:
        first = tuple(int(i) for i in given[outside][0]) if given.size else ()
        raise QualityError(
            f"The feature at {first} with a box of {tuple(int(2 * r + 1) for r in radii)} voxels "
            f"does not fit a stack of shape {tuple(shape)}.",
            "features, sites (plane, u, v)",
            "Move it inside or make it smaller.",
        )
    for number, site in enumerate(given):
        near = (np.abs(given[:number] - site) <= 2 * reach).all(axis=1)
        if near.any():
            other = given[:number][near][0]
            raise QualityError(
                f"The features at {tuple(map(int, other))} and {tuple(map(int, site))} overlap.",
                "features, sites (plane, u, v)",
                "Move them apart, or insert them one at a time.",
            )
    return given


def tissue(
    reference: Array, mask: NDArray[np.bool_] | None, share: float = 0.3
) -> NDArray[np.bool_]:
    """Voxels of the mask whose smoothed magnitude is at least a share of the mask's median."""
    smooth = smoothed(np.abs(reference).astype(np.float64), 1.5)
    inside = np.ones(reference.shape, bool) if mask is None else mask.astype(bool)
    return np.asarray(inside & (smooth >= share * np.median(smooth[inside])))


def smoothed(stack: Array, sigma: float) -> Array:
    """A stack blurred in plane by a Gaussian, sigma in voxels."""
    from scipy.ndimage import gaussian_filter

    widths = (0.0, sigma, sigma)
    if np.iscomplexobj(stack):
        return np.asarray(
            gaussian_filter(stack.real, widths) + 1j * gaussian_filter(stack.imag, widths)
        )
    return np.asarray(gaussian_filter(stack, widths))
