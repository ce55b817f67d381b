"""Feature retention: what is left of small inserted features after the whole chain.

Features are added to the object with the local signal's size and phase, encoded, and the data
recovered with and without them, same noise, same weights. What differs is the feature as the
recovery shows it. With f the inserted and d the recovered feature, over the feature's patch:

* retention = Re <f, d> / <f, f>: 1 where the feature comes back in full. For a linear recovery by
  projection (``zero-filled``) and one feature it is ||P f||^2 / ||f||^2, which can only grow with
  more samples.
* size = full width at half of the mean height over the feature's core, interpolated: geometric mean
  of the widths along u and v; for a line, the width across it
* displacement = |t| of the least-squares fit d = c f - c t . grad f
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import QualityError
from mrics.quality.chain import Chain, Progress
from mrics.quality.confidence import Interval, estimate
from mrics.quality.features import Feature
from mrics.quality.sites import check_sites, choose_sites, smoothed, tissue
from mrics.quality.widths import half_widths

Array = NDArray[Any]


@dataclass(frozen=True)
class Retention:
    """One feature at several sites.

    Attributes
    ----------
    feature : Feature
    sites : ndarray of int, shape (n, 3)
        (plane, u, v).
    heights : ndarray of shape (n,)
        Height of the inserted feature at each site, in units of the image.
    change : ndarray of shape (plane, u, v), float32
        Magnitude of the image recovered with the features less that without.
    retained : ndarray of shape (n,)
        Retained share of the contrast.
    size_mm, inserted_mm : ndarray of shape (n,)
        Size at half maximum as recovered and as inserted; NaN where nothing is left.
    displacement_mm : ndarray of shape (n,)
    interval, size_interval, displacement_interval : Interval or None
        Of the means of ``retained``, ``size_mm`` and ``displacement_mm``, over sites of this
        acquisition alone.
    """

    feature: Feature
    sites: NDArray[np.intp]
    heights: Array
    change: Array
    retained: Array
    size_mm: Array
    inserted_mm: Array
    displacement_mm: Array
    interval: Interval | None
    size_interval: Interval | None
    displacement_interval: Interval | None

    @property
    def mean(self) -> float:
        """Mean retained share."""
        return float(self.retained.mean())


def feature_retention(
    chain: Chain,
    reference: Array,
    features: Sequence[Feature],
    voxel_mm: tuple[float, float, float],
    *,
    region: Array | None = None,
    sites: Array | None = None,
    count: int = 12,
    seed: int = 0,
    progress: Progress | None = None,
) -> list[Retention]:
    """Insert features and measure what is left of them.

    Parameters
    ----------
    chain : Chain
        Acquisition and frozen recovery.
    reference : ndarray of shape (plane, u, v)
        Fully sampled image, for the local signal and phase.
    features : sequence of Feature
        Each is inserted at all its sites in one recovery of its own.
    voxel_mm : tuple of float
        Voxel size along (plane, u, v).
    region : ndarray of shape (plane, u, v), bool or integer, optional
        Body mask or label map the sites are drawn in; tissue of the reference if left out.
    sites : ndarray of int, shape (n, 3), optional
        Given sites, used for every feature in place of drawn ones.
    count : int
        Sites drawn for each feature.
    seed : int
        Of the sites.
    progress : callable of (done, total), optional

    Raises
    ------
    QualityError
        For a region on another grid, features larger than the region or overlapping, and sites
        without signal.
    """
    reference = np.asarray(reference)
    for name, array in (("reference", reference), ("region", region)):
        if array is not None and array.shape != chain.base.shape:
            raise QualityError(
                f"The {name} is on another grid than the images: {array.shape} and "
                f"{chain.base.shape}.",
                name,
                "Bring it to the grid of the studied planes.",
            )
    # A mask is narrowed to tissue; a label map is taken as it is given.
    allowed = np.ones(reference.shape, bool) if region is None else np.asarray(region)
    if allowed.dtype == bool:
        allowed = tissue(reference, allowed)
    signal = smoothed(np.abs(reference).astype(np.float64), 2.0)
    # Where the chain's own sensitivities set the phase, a feature takes that of the image.
    phased = chain.base if chain.phase_free else reference
    phase = _unit(smoothed(phased, 1.0)) if np.iscomplexobj(phased) else None
    placed = []
    by_radii: dict[tuple[int, int, int], NDArray[np.intp]] = {}
    for feature in features:
        radii = feature.radii(voxel_mm)
        if radii not in by_radii:
            # Features of one size sit at the same sites, whatever their contrast.
            by_radii[radii] = (
                choose_sites(allowed, radii, count, seed=seed)
                if sites is None
                else check_sites(sites, reference.shape, radii)
            )
        mine = by_radii[radii]
        levels = signal[tuple(mine.T)]
        if not levels.all():
            where = tuple(int(i) for i in mine[levels == 0.0][0])
            raise QualityError(
                f"There is no signal at the site {where}.",
                "features, sites (plane, u, v)",
                "Insert features inside tissue.",
            )
        placed.append((feature, mine, levels * feature.contrast / 100.0))
    inserted = (
        _insert(reference.shape, feature.patch(voxel_mm), mine, heights, phase)
        for feature, mine, heights in placed
    )
    changes = (chain.encode(one.astype(chain.base.dtype)) for one in inserted)
    images = chain.images(changes, total=len(placed), progress=progress)
    return [
        _measure(image, chain.base, one, voxel_mm, phase)
        for image, one in zip(images, placed, strict=True)
    ]


def _unit(image: Array) -> Array:
    size = np.abs(image)
    return np.where(size > 0.0, image / np.where(size > 0.0, size, 1.0), 1.0)


def _box(site: Array, shape: tuple[int, ...]) -> tuple[slice, ...]:
    return tuple(
        slice(int(at) - n // 2, int(at) + n // 2 + 1) for at, n in zip(site, shape, strict=True)
    )


def _insert(
    shape: tuple[int, ...], patch: Array, sites: Array, heights: Array, phase: Array | None
) -> Array:
    image = np.zeros(shape, dtype=np.complex128)
    for site, height in zip(sites, heights, strict=True):
        box = _box(site, patch.shape)
        image[box] += height * patch if phase is None else height * patch * phase[box]
    return image


def _measure(
    image: Array,
    base: Array,
    placed: tuple[Feature, Array, Array],
    voxel_mm: tuple[float, float, float],
    phase: Array | None,
) -> Retention:
    feature, sites, heights = placed
    response = image - base
    patch = feature.patch(voxel_mm)
    windows = np.empty((len(sites), *patch.shape))
    for row, (site, height) in enumerate(zip(sites, heights, strict=True)):
        box = _box(site, patch.shape)
        window = response[box] if phase is None else response[box] * np.conj(phase[box])
        windows[row] = window.real / height
    retained = (windows * patch).sum(axis=(1, 2, 3)) / float((patch**2).sum())
    size = _sizes(feature, windows, patch, voxel_mm)
    inserted = _sizes(feature, patch[None], patch, voxel_mm)
    displacement = _displacements(windows, patch, voxel_mm)
    return Retention(
        feature=feature,
        sites=sites,
        heights=heights,
        change=(np.abs(image) - np.abs(base)).astype(np.float32),
        retained=retained,
        size_mm=size,
        inserted_mm=np.broadcast_to(inserted, size.shape),
        displacement_mm=displacement,
        interval=_over_sites(retained),
        size_interval=_over_sites(size),
        displacement_interval=_over_sites(displacement),
    )


def _over_sites(values: Array) -> Interval | None:
    """Student t over the sites that have a value; None for fewer than two."""
    seen = values[np.isfinite(values)]
    if seen.size < 2:
        return None
    interval = estimate({"this": dict(enumerate(seen.tolist()))}).interval()
    if interval is None:
        return None
    over = f"{seen.size} sites of this acquisition"
    return Interval(interval.low, interval.high, interval.level, "Student t", over)


def _sizes(
    feature: Feature, windows: Array, patch: Array, voxel_mm: tuple[float, float, float]
) -> Array:
    """Size at half height in mm, of windows of shape (n, plane, u, v)."""
    middle = [n // 2 for n in patch.shape]
    core = patch >= 0.5 * patch[tuple(middle)]
    level = windows[:, core].mean(axis=1)
    along_u = half_widths(windows[:, middle[0], :, middle[2]], level).width * voxel_mm[1]
    along_v = half_widths(windows[:, middle[0], middle[1], :], level).width * voxel_mm[2]
    if feature.shape != "line":
        return np.sqrt(along_u * along_v)
    angle = np.deg2rad(feature.angle_deg)
    if abs(np.cos(angle)) >= abs(np.sin(angle)):
        return along_v * abs(np.cos(angle))
    return along_u * abs(np.sin(angle))


def _displacements(windows: Array, patch: Array, voxel_mm: tuple[float, float, float]) -> Array:
    """Length in mm of the shift along u and v that fits each window best, to first order."""
    slopes = [-_slope(patch, axis) / voxel_mm[axis] for axis in (1, 2)]
    columns = np.stack([patch.ravel(), *(slope.ravel() for slope in slopes)], axis=1)
    fit, *_ = np.linalg.lstsq(columns, windows.reshape(len(windows), -1).T, rcond=None)
    height = np.where(fit[0] > 0.0, fit[0], np.nan)
    return np.asarray(np.hypot(fit[1], fit[2]) / height)


def _slope(patch: Array, axis: int) -> Array:
    """Derivative per voxel of the band-limited image along an axis."""
    steps = np.subtract.outer(np.arange(patch.shape[axis]), np.arange(patch.shape[axis]))
    weights = np.where(steps == 0, 0.0, (-1.0) ** steps / np.where(steps == 0, 1, steps))
    return np.moveaxis(np.tensordot(weights, patch, axes=(1, axis)), 0, axis)
