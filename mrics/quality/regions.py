"""Statistics of labelled regions, and their agreement with the reference."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import QualityError
from mrics.quality._inputs import as_stack, magnitude

Array = NDArray[Any]


@dataclass(frozen=True)
class Agreement:
    """Bland-Altman limits of region means, one pair of means per plane.

    Attributes
    ----------
    bias : float
        Mean of recovered less reference.
    low, high : float
        ``bias`` less and plus 1.96 standard deviations of the differences; NaN for one plane.
    planes : int
        Pairs it is taken over.
    """

    bias: float
    low: float
    high: float
    planes: int


@dataclass(frozen=True)
class Region:
    """One label.

    Attributes
    ----------
    label : int
    voxels : int
    mean, sd : float
        Of the recovered magnitude.
    reference_mean, reference_sd : float
        Of the reference's.
    contrast : float
        (mean - background) / background, NaN without a background label.
    reference_contrast : float
        The same in the reference.
    cnr : float
        |mean - background| / root of the mean of both variances.
    reference_cnr : float
        The same in the reference.
    uniformity : float
        100 (1 - (max - min) / (max + min)), per cent.
    agreement : Agreement
        Over the planes that hold the label.
    plane_means, reference_plane_means : tuple of float
        What it is taken of.
    """

    label: int
    voxels: int
    mean: float
    sd: float
    reference_mean: float
    reference_sd: float
    contrast: float
    reference_contrast: float
    cnr: float
    reference_cnr: float
    uniformity: float
    agreement: Agreement
    plane_means: tuple[float, ...]
    reference_plane_means: tuple[float, ...]


def region_statistics(
    image: Array, reference: Array, labels: Array, *, background: int | None = None
) -> list[Region]:
    """Statistics of every label but 0.

    Parameters
    ----------
    image, reference : ndarray of shape (u, v) or (plane, u, v)
        Magnitudes are taken.
    labels : ndarray of integer, same shape
        0 is no region.
    background : int, optional
        Label that contrast and CNR are taken against.

    Raises
    ------
    QualityError
        For labels on another grid, that are not whole numbers or hold no region, and for a
        background label that is not there.

    References
    ----------
    Bland and Altman 1986, Lancet 327:307-310 (limits of agreement). Uniformity after the ACR MRI
    quality-control manual (formula from memory).
    """
    labels = np.asarray(labels)
    if labels.shape != np.shape(image):
        raise QualityError(
            f"The label map is on another grid than the image: {labels.shape} and "
            f"{np.shape(image)}.",
            "labels",
            "Bring it to the grid of the studied planes.",
        )
    if not np.array_equal(labels, np.round(labels)):
        raise QualityError(
            "The label map holds values that are not whole numbers.",
            "labels",
            "Give a map of integer labels, without interpolation.",
        )
    stack, ref, _ = as_stack(image, reference, None)
    labels = labels.astype(np.intp).reshape(stack.shape)
    names = [int(name) for name in np.unique(labels) if name != 0]
    if not names or (background is not None and background not in names):
        raise QualityError(
            f"The label map holds the regions {names}; the background label is {background}.",
            "labels",
            "Give a map with regions above 0 and name one of them as background, or none.",
        )
    ours, theirs = magnitude(stack), magnitude(ref)
    base = None if background is None else labels == background
    return [_region(name, ours, theirs, labels == name, base) for name in names]


def region_planes(
    image: Array, reference: Array, labels: Array, *, background: int | None = None
) -> list[dict[str, float | None]]:
    """How far the regions of every plane are off at worst.

    Parameters
    ----------
    image, reference, labels, background
        As for :func:`region_statistics`, checked there.

    Returns
    -------
    list of dict
        ``region_bias``, the largest |mean - reference mean| / reference mean of a region of the
        plane; with a background ``region_cnr``, the smallest CNR over the reference's. None in
        planes without a region, or without background.
    """
    rows: list[dict[str, float | None]] = []
    for plane, truth, names in zip(
        magnitude(image), magnitude(reference), np.asarray(labels), strict=True
    ):
        base = None if background is None else names == background
        biases, kept = [], []
        for name in np.unique(names[names != 0]):
            inside = names == name
            level = float(truth[inside].mean())
            if level > 0.0:
                biases.append(abs(float(plane[inside].mean()) - level) / level)
            if base is not None and base.any() and name != background:
                ours, theirs = _contrast(plane, inside, base)[1], _contrast(truth, inside, base)[1]
                if np.isfinite(ours) and theirs > 0.0:
                    kept.append(ours / theirs)
        rows.append({"region_bias": max(biases, default=None)})
        if background is not None:
            rows[-1]["region_cnr"] = min(kept, default=None)
    return rows


def bland_altman(ours: Array, theirs: Array) -> Agreement:
    """Bias and limits of agreement of paired values."""
    difference = np.asarray(ours, dtype=np.float64) - np.asarray(theirs, dtype=np.float64)
    bias = float(difference.mean())
    reach = 1.96 * float(difference.std(ddof=1)) if difference.size > 1 else float("nan")
    return Agreement(bias, bias - reach, bias + reach, int(difference.size))


def _region(
    name: int, ours: Array, theirs: Array, inside: Array, background: Array | None
) -> Region:
    planes = np.flatnonzero(inside.any(axis=(1, 2)))
    means = [[stack[plane][inside[plane]].mean() for plane in planes] for stack in (ours, theirs)]
    values = ours[inside]
    own = [_contrast(stack, inside, background) for stack in (ours, theirs)]
    top, bottom = float(values.max()), float(values.min())
    return Region(
        label=name,
        voxels=int(inside.sum()),
        mean=float(values.mean()),
        sd=_sd(values),
        reference_mean=float(theirs[inside].mean()),
        reference_sd=_sd(theirs[inside]),
        contrast=own[0][0],
        reference_contrast=own[1][0],
        cnr=own[0][1],
        reference_cnr=own[1][1],
        uniformity=100.0 * (1.0 - (top - bottom) / (top + bottom)) if top > 0.0 else float("nan"),
        agreement=bland_altman(np.array(means[0]), np.array(means[1])),
        plane_means=tuple(map(float, means[0])),
        reference_plane_means=tuple(map(float, means[1])),
    )


def _sd(values: Array) -> float:
    return float(values.std(ddof=1)) if values.size > 1 else float("nan")


def _contrast(stack: Array, inside: Array, background: Array | None) -> tuple[float, float]:
    if background is None:
        return float("nan"), float("nan")
    here, there = stack[inside], stack[background]
    gap = float(here.mean() - there.mean())
    level = float(there.mean())
    noise = float(np.sqrt(0.5 * (here.var() + there.var())))
    return (
        gap / level if level > 0.0 else float("nan"),
        abs(gap) / noise if noise > 0.0 else float("nan"),
    )
