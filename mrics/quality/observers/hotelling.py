"""Channelised Hotelling observer on recovered images, and its efficiency against the ideal one.

Backgrounds of a fitted spectrum and noise of the acquisition's level are added to the data, half of
them with the feature, and every one is recovered. The observer sees the change against the
recovery of the data as they are (a known mean), in the local phase, through difference-of-Gaussians
channels around the known site, and decides by the linear template that separates best.

Channel outputs are sums over many voxels and taken as normal with one covariance. Then the squared
distance of the two sample means, in units of the pooled covariance, follows a non-central F law
(Hotelling's T^2), which gives an estimate without the bias of a trained template and an exact
interval.

References
----------
Abbey and Barrett 2001, J Opt Soc Am A 18:473-488 (dense difference-of-Gaussians channels, numbers
from memory). Wunderlich, Noo, Gallas, Heilbrun 2015, IEEE Trans Med Imaging 34:453-464 (exact
intervals, from memory).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import blocks
from mrics.errors import QualityError
from mrics.numerics import centred_ifft, stream
from mrics.quality.chain import Chain, Progress
from mrics.quality.confidence import Interval
from mrics.quality.observers.background import Spectrum, radial_frequency
from mrics.quality.observers.ideal import detectability
from mrics.quality.observers.tasks import Task
from mrics.quality.resolution import local_phase

Array = NDArray[Any]
CHANNELS = 10
_FIRST, _STEP, _WIDTH = 0.005, 1.4, 1.67
_PATCH = 65


@dataclass(frozen=True)
class Accuracy:
    """How well two groups of channel outputs can be told apart.

    Attributes
    ----------
    auc : float
        Area under the ROC curve.
    interval : Interval
        Of ``auc``.
    d_prime : float
        sqrt(2) times the normal quantile of ``auc``.
    d_prime_low, d_prime_high : float
        The same of the interval's ends.
    """

    auc: float
    interval: Interval
    d_prime: float
    d_prime_low: float
    d_prime_high: float


@dataclass(frozen=True)
class Observed:
    """A feature through one recovery, as an observer of the image and of the data sees it.

    Attributes
    ----------
    task : Task
    site : tuple of int
        Voxel (u, v) of the feature.
    image : Accuracy
        Channelised Hotelling observer on recovered images.
    ideal : float
        d' of the ideal observer on the same data, same backgrounds.
    efficiency : float
        Square of the ratio of the two d'; the share of the data's information that the image shows
        to this observer. NaN without a signal.
    efficiency_low, efficiency_high : float
        From the interval of the AUC.
    images : int
        Recovered images in all.
    """

    task: Task
    site: tuple[int, int]
    image: Accuracy
    ideal: float
    efficiency: float
    efficiency_low: float
    efficiency_high: float
    images: int


def hotelling_observer(
    chain: Chain,
    task: Task,
    spectrum: Spectrum,
    voxel_mm: tuple[float, float],
    site: tuple[int, int],
    *,
    images: int = 400,
    seed: int = 0,
    progress: Progress | None = None,
) -> Observed:
    """Detection of a feature in recovered images, against the bound of the data.

    Parameters
    ----------
    chain : Chain
        Acquisition and frozen recovery; each of its planes gives one image a run.
    task : Task
        Of kind "detection".
    spectrum : Spectrum
        Of the anatomical background.
    voxel_mm : tuple of float
        Voxel size along u and v.
    site : tuple of int
        Voxel (u, v) of the feature.
    images : int
        Recovered images, half of them with the feature; at least 80.
    seed : int
        Of backgrounds and noise.
    progress : callable of (done, total), optional

    Raises
    ------
    QualityError
        For another kind of task, fewer than 80 images, and a site outside the plane.
    """
    planes, u, v = chain.base.shape
    if task.kind != "detection":
        raise QualityError(
            f"Channels without orientation cannot judge the task {task.kind!r}.",
            "observers, task",
            "Use detection; the ideal observer takes both tasks.",
        )
    if images < 8 * CHANNELS:
        raise QualityError(
            f"{images} images are too few for {CHANNELS} channels.",
            "observers, images",
            f"Use at least {8 * CHANNELS}.",
        )
    if not (0 <= site[0] < u and 0 <= site[1] < v):
        raise QualityError(
            f"The site {site} lies outside planes of shape {(u, v)}.", "observers, site", "Move it."
        )
    signal = task.kspace((u, v), voxel_mm, site)
    where = np.array([(plane, *site) for plane in range(planes)], dtype=np.intp)
    phase = local_phase(chain.base, where)[:, None, None]
    runs = -(-images // (2 * planes))
    data = _ensemble(chain, spectrum, voxel_mm, signal[None] * phase, runs, seed)
    box, templates = channel_templates((u, v), voxel_mm, site)
    outputs = [
        np.einsum(
            "puv,cuv->pc",
            ((image[box] - chain.base[box]) * np.conj(phase)).real,
            templates,
            optimize=True,
        )
        for image in chain.images(data, total=2 * runs, progress=progress)
    ]
    absent, present = np.concatenate(outputs[::2]), np.concatenate(outputs[1::2])
    seen = accuracy(present, absent)
    bound = _ideal(chain, task, spectrum, voxel_mm, site)

    def efficiency(d_prime: float) -> float:
        return (max(0.0, d_prime) / bound) ** 2 if bound > 0.0 else float("nan")

    return Observed(
        task=task,
        site=site,
        image=seen,
        ideal=bound,
        efficiency=efficiency(seen.d_prime),
        efficiency_low=efficiency(seen.d_prime_low),
        efficiency_high=efficiency(seen.d_prime_high),
        images=2 * runs * planes,
    )


def channel_templates(
    shape: tuple[int, int], voxel_mm: tuple[float, float], site: tuple[int, int]
) -> tuple[tuple[slice, ...], Array]:
    """Box around the site and the channels' weights in it, shape (channel, u, v).

    Channel j passes exp(-f^2 / 2 (Q s_j)^2) - exp(-f^2 / 2 s_j^2), s_j = 0.005 1.4^j cycles per
    voxel (of the smaller side), Q = 1.67, j = 1 to 10.
    """
    grid = (_PATCH, _PATCH)
    smaller = min(voxel_mm)
    f = radial_frequency(grid, voxel_mm) * smaller
    centre = _FIRST * _STEP ** np.arange(1, CHANNELS + 1)[:, None, None]
    passed = np.exp(-0.5 * (f / (_WIDTH * centre)) ** 2) - np.exp(-0.5 * (f / centre) ** 2)
    whole = centred_ifft(passed.astype(np.complex128)).real
    half = _PATCH // 2
    box, crop = [slice(None)], [slice(None)]
    for at, length in zip(site, shape, strict=True):
        low, high = max(0, at - half), min(length, at + half + 1)
        box.append(slice(low, high))
        crop.append(slice(low - at + half, high - at + half))
    return tuple(box), np.ascontiguousarray(whole[tuple(crop)])


def accuracy(present: Array, absent: Array, level: float = 0.95) -> Accuracy:
    """How well the best linear observer of normal outputs tells two groups apart.

    Parameters
    ----------
    present, absent : ndarray of shape (n, channel)
        Independent outputs with and without the feature.
    level : float
        Of the interval, two-sided.

    Returns
    -------
    Accuracy
        ``d_prime`` is 0 where the unbiased estimate of its square is negative.
    """
    from scipy.stats import norm

    n1, n0 = len(present), len(absent)
    channels = present.shape[1]
    pooled = ((n1 - 1) * np.cov(present.T) + (n0 - 1) * np.cov(absent.T)) / (n1 + n0 - 2)
    difference = present.mean(axis=0) - absent.mean(axis=0)
    distance = float(difference @ np.linalg.solve(np.atleast_2d(pooled), difference))
    share = n1 * n0 / (n1 + n0)
    freedom = n1 + n0 - channels - 1
    square = distance * (freedom - 2) / (n1 + n0 - 2) - channels / share
    statistic = share * distance * freedom / ((n1 + n0 - 2) * channels)
    tail = (1.0 - level) / 2.0
    ends = [
        float(np.sqrt(_non_centrality(statistic, channels, freedom, p) / share))
        for p in (1.0 - tail, tail)
    ]
    d_prime = float(np.sqrt(max(0.0, square)))
    auc, low, high = (float(a) for a in norm.cdf(np.array([d_prime, *ends]) / np.sqrt(2.0)))
    interval = Interval(low, high, level, "non-central F", f"{n1 + n0} images")
    return Accuracy(auc, interval, d_prime, ends[0], ends[1])


def _non_centrality(statistic: float, top: int, bottom: int, probability: float) -> float:
    """Non-centrality for which the F statistic has that lower tail; 0 where even 0 gives less."""
    from scipy.optimize import brentq
    from scipy.special import ncfdtr

    def excess(value: float) -> float:
        return float(ncfdtr(top, bottom, value, statistic)) - probability

    if excess(0.0) <= 0.0:
        return 0.0
    high = max(1.0, statistic * top)
    while excess(high) > 0.0:
        high *= 2.0
    return float(brentq(excess, 0.0, high, xtol=1e-10, rtol=1e-10))


def _ensemble(
    chain: Chain,
    spectrum: Spectrum,
    voxel_mm: tuple[float, float],
    signal: Array,
    runs: int,
    seed: int,
) -> Iterator[Array]:
    """Data changes of runs without and with the signal, in turn, all independent."""
    power = spectrum.on_grid(chain.base.shape[1:], voxel_mm)
    for number in range(2 * runs):
        generator = stream(seed, "observer", number)
        yield chain.random(generator, power, signal if number % 2 else 0.0)


def _ideal(
    chain: Chain,
    task: Task,
    spectrum: Spectrum,
    voxel_mm: tuple[float, float],
    site: tuple[int, int],
) -> float:
    """Root of the mean over planes of d'^2 of the data."""
    held = chain.acquisition
    shape = held.shape[1:]
    signal = task.kspace(shape, voxel_mm, site)[None]
    power = spectrum.on_grid(shape, voxel_mm)
    squares = []
    for planes, encoding, _ in blocks(held):
        for offset in range(planes.stop - planes.start):
            mask = held.mask[held.pattern_index[planes.start + offset]]
            maps = encoding.part(slice(offset, offset + 1)).sensitivities
            anatomical, _ = detectability(
                np.broadcast_to(mask, shape)[None],
                signal,
                power,
                chain.sigma,
                None if maps is None else maps[0],
            )
            squares.append(float(anatomical[0, 0]))
            if maps is None and len(held.mask) == 1:
                return float(np.sqrt(squares[0]))
    return float(np.sqrt(np.mean(squares)))
