"""Local resolution: the response of a recovery to small point perturbations.

A point of known size is added to the object at a site, its data are added to the acquisition's, and
the difference of the two recovered images is the response there, for a recovery of any kind. Many
sites are perturbed at once on a scattered lattice with random signs, and another lattice is laid
between the sites in the next run, so that a few recoveries give a map. With a linear recovery the
response to the lattice is the sum of the responses to its sites. Sites are scattered because the
aliases of a regular lattice can fall on its own sites.

References
----------
Chan and Haldar 2021, local perturbation responses, Magn Reson Med 86:1873-1887 (year, title and
idea seen; pages from memory).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import QualityError
from mrics.numerics import stream
from mrics.quality.chain import Chain, Progress
from mrics.quality.widths import half_widths

Array = NDArray[Any]
#: voxels around a site, along each axis, that count as its main lobe
LOBE = 2
_STRETCH = 512


@dataclass(frozen=True)
class LocalResolution:
    """Responses of a recovery at many sites.

    Attributes
    ----------
    sites : ndarray of int, shape (n, 3)
        (plane, u, v) of each site.
    width_mm : ndarray of shape (n, 2)
        Full width at half maximum along u and v; infinite where wider than the window, NaN where
        the response has no positive peak.
    height : ndarray of shape (n,)
        Peak of the response, 1 where the point comes back in full.
    leaked : ndarray of shape (n,)
        Share of the response energy in the site's window that lies outside its main lobe
        (5 x 5 voxels).
    elsewhere : float
        Share of a response's energy that lies outside its main lobe, anywhere in the plane; what
        the lobes of other sites catch of it by chance is allowed for.
    lattice_leakage : float
        Energy that the other sites put into a site's window, on average, over the energy of its
        main lobe: how far a site's own response is blurred by measuring many at once.
    median_mm : tuple of float
        Median widths along u and v.
    amplitude_sigma : float
        Size of the perturbation in units of the noise level.
    runs : int
        Recoveries it took.
    note : str
        For non-linear recoveries, that the response is local in amplitude too.
    """

    sites: NDArray[np.intp]
    width_mm: Array
    height: Array
    leaked: Array
    elsewhere: float
    lattice_leakage: float
    median_mm: tuple[float, float]
    amplitude_sigma: float
    runs: int
    note: str

    def as_maps(self, shape: tuple[int, int, int]) -> Array:
        """Widths along u and v at every voxel, those of the nearest site in plane.

        Shape (2, plane, u, v); planes without a site are NaN.
        """
        from scipy.ndimage import distance_transform_edt

        out = np.full((2, *shape), np.nan, dtype=np.float32)
        for plane in np.unique(self.sites[:, 0]):
            mine = np.flatnonzero(self.sites[:, 0] == plane)
            place = tuple(self.sites[mine, 1:].T)
            number = np.zeros(shape[1:], dtype=np.intp)
            number[place] = mine
            away = np.ones(shape[1:], dtype=bool)
            away[place] = False
            nearest = distance_transform_edt(away, return_distances=False, return_indices=True)
            out[:, plane] = np.moveaxis(self.width_mm[number[tuple(nearest)]], -1, 0)
        return out


def local_resolution(
    chain: Chain,
    voxel_mm: tuple[float, float],
    *,
    mask: NDArray[np.bool_] | None = None,
    spacing: int = 13,
    interleaves: int = 4,
    amplitude_sigma: float = 5.0,
    seed: int = 0,
    progress: Progress | None = None,
) -> LocalResolution:
    """Measure response widths on interleaved lattices of sites.

    Parameters
    ----------
    chain : Chain
        Acquisition and frozen recovery.
    voxel_mm : tuple of float
        Voxel size along u and v.
    mask : ndarray of bool, shape (plane, u, v), optional
        Where sites may lie; everywhere if left out.
    spacing : int
        Least distance of the sites of one run along u or v, in voxels, at least 9.
    interleaves : int
        Runs, each with other sites, a quarter of ``spacing`` away from those of earlier runs.
    amplitude_sigma : float
        Size of a perturbation in units of the chain's noise level, in the image's local phase.
    seed : int
        Of sites and signs.
    progress : callable of (done, total), optional

    Raises
    ------
    QualityError
        For a spacing below 9, no interleaves, an amplitude that is not positive, and a mask that
        holds no site.
    """
    if spacing < 9 or interleaves < 1 or not amplitude_sigma > 0.0:
        raise QualityError(
            f"Spacing {spacing}, interleaves {interleaves} and amplitude {amplitude_sigma} sigma "
            "do not make a lattice.",
            "resolution",
            "Use a spacing of at least 9 voxels, 1 run or more and a positive amplitude.",
        )
    generator = stream(seed, "perturbation lattice")
    half = (spacing - 1) // 2
    taken = np.empty((0, 3), dtype=np.intp)
    lattices = []
    for _ in range(interleaves):
        sites = _lattice(chain.base.shape, mask, spacing, half, taken, generator)
        taken = np.concatenate([taken, sites])
        lattices.append((sites, generator.choice((-1.0, 1.0), size=len(sites))))
    if not any(len(sites) for sites, _ in lattices):
        raise QualityError(
            "No lattice site lies in the mask.", "mask", "Use a smaller spacing or a larger mask."
        )
    lattices = [pair for pair in lattices if len(pair[0])]
    before = chain.runs
    size = amplitude_sigma * chain.sigma
    values = [size * signs * local_phase(chain.base, sites) for sites, signs in lattices]
    changes = (
        chain.encode(points(chain.base.shape, sites, value, chain.base.dtype))
        for (sites, _), value in zip(lattices, values, strict=True)
    )
    images = chain.images(changes, total=len(lattices), progress=progress)
    parts = [
        _measure(image - chain.base, sites, value, half)
        for image, (sites, _), value in zip(images, lattices, values, strict=True)
    ]
    columns = (list(column) for column in zip(*parts, strict=True))
    widths, heights, leaked, lobes, totals = columns
    width = np.concatenate(widths) * np.asarray(voxel_mm, dtype=np.float64)
    sites = np.concatenate([sites for sites, _ in lattices])
    total, area = float(sum(totals)), (2 * LOBE + 1) ** 2
    # Lobes cover this share of the stack and catch as much of what other sites spread over it.
    caught = area * len(sites) / (len(lattices) * chain.base.size)
    own = max(0.0, (float(sum(lobes)) - caught * total) / (1.0 - caught))
    stray = max(0.0, total - own) / (len(lattices) * chain.base.size)
    window = (2 * half + 1) ** 2
    median = np.nanmedian(width, axis=0) if not np.isnan(width).all() else np.full(2, np.nan)
    return LocalResolution(
        sites=sites,
        width_mm=width,
        height=np.concatenate(heights),
        leaked=np.concatenate(leaked),
        elsewhere=max(0.0, 1.0 - own / total) if total > 0.0 else float("nan"),
        lattice_leakage=stray * window * len(sites) / own if own > 0.0 else float("nan"),
        median_mm=(float(median[0]), float(median[1])),
        amplitude_sigma=amplitude_sigma,
        runs=chain.runs - before,
        note=""
        if chain.linear
        else "This recovery is not linear: the response holds for this image, noise and amplitude.",
    )


def point_response(chain: Chain, site: tuple[int, int, int], amplitude_sigma: float = 5.0) -> Array:
    """Response to one point, as an image of shape (plane, u, v) per unit of the point.

    For a linear recovery this is its point spread function at the site.
    """
    sites = np.array([site], dtype=np.intp)
    value = amplitude_sigma * chain.sigma * local_phase(chain.base, sites)
    change = chain.encode(points(chain.base.shape, sites, value, chain.base.dtype))
    return (next(chain.images([change])) - chain.base) / value[0]


def points(shape: tuple[int, ...], sites: NDArray[np.intp], values: Array, dtype: Any) -> Array:
    """An image that is zero but for ``values`` at ``sites``."""
    image = np.zeros(shape, dtype=dtype)
    image[tuple(sites.T)] = values
    return image


def local_phase(image: Array, sites: NDArray[np.intp]) -> Array:
    """exp(i phase) of an image at sites; 1 where the image is zero."""
    value = image[tuple(sites.T)].astype(np.complex128)
    size = np.abs(value)
    return np.where(size > 0.0, value / np.where(size > 0.0, size, 1.0), 1.0)


def _lattice(
    shape: tuple[int, ...],
    mask: NDArray[np.bool_] | None,
    spacing: int,
    half: int,
    taken: NDArray[np.intp],
    generator: np.random.Generator,
) -> NDArray[np.intp]:
    """Scattered sites in the mask, ``spacing`` apart, whose windows lie wholly in the plane."""
    chosen = []
    for plane in range(shape[0]):
        free = np.zeros(shape[1:], dtype=bool)
        free[half : shape[1] - half, half : shape[2] - half] = True
        if mask is not None:
            free &= mask[plane]
        for u, v in taken[taken[:, 0] == plane, 1:]:
            _clear(free, u, v, spacing // 4)
        candidates = np.argwhere(free)
        order = candidates[generator.permutation(len(candidates))]
        at = 0
        while at < len(order):
            # A stretch at a time: most candidates lie too near to a site that was taken before.
            ahead = order[at : at + _STRETCH]
            left = np.flatnonzero(free[tuple(ahead.T)])
            at += int(left[0]) + 1 if left.size else len(ahead)
            if left.size:
                u, v = ahead[left[0]]
                chosen.append((plane, u, v))
                _clear(free, u, v, spacing)
    return np.array(chosen, dtype=np.intp).reshape(-1, 3)


def _clear(free: NDArray[np.bool_], u: int, v: int, reach: int) -> None:
    free[max(0, u - reach + 1) : u + reach, max(0, v - reach + 1) : v + reach] = False


def _measure(
    response: Array, sites: NDArray[np.intp], values: Array, half: int
) -> tuple[Array, Array, Array, float, float]:
    """Widths (voxels), heights, leaked shares; energy of the lobes and of all."""
    reach = np.arange(-half, half + 1)
    plane = sites[:, 0, None, None]
    window = response[
        plane, sites[:, 1, None, None] + reach[:, None], sites[:, 2, None, None] + reach
    ].astype(np.complex128)
    window = window / values[:, None, None]
    along_u = half_widths(window[:, :, half].real)
    along_v = half_widths(window[:, half, :].real)
    energy = np.abs(window) ** 2
    middle = slice(half - LOBE, half + LOBE + 1)
    lobe = energy[:, middle, middle].sum(axis=(1, 2))
    whole = energy.sum(axis=(1, 2))
    leaked = np.divide(whole - lobe, whole, out=np.full(len(sites), np.nan), where=whole > 0.0)
    scale = float(np.abs(values[0]) ** 2)
    total = float(np.vdot(response, response).real) / scale
    widths = np.stack([along_u.width, along_v.width], axis=1)
    return widths, window[:, half, half].real, leaked, float(lobe.sum()), total
