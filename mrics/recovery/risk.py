"""Estimates, from the data alone, of how wrong a recovery is: what a weight is chosen by.

With f(y) = A x(y) the recovered samples, d the measured ones of a set of planes, M their number
and 2 sigma^2 the noise energy of one complex sample:

* misfit: ||f - d||^2 over the measured samples;
* Stein's unbiased risk, of the measured samples: ||f - d||^2 - 2 sigma^2 M + 2 sigma^2 div, an
  unbiased estimate of E ||f - A x_true||^2; div, the divergence of f with respect to the real and
  imaginary parts of d, by one random probe (Ramani, Blu & Unser 2008,
  doi:10.1109/TIP.2008.2001404);
* held-out samples: ||f - d||^2 over samples left out of the recovery, each over its inclusion
  probability p: the error of all samples outside the calibration region, plus their noise;
* whole k-space: Stein's risk of the samples kept, its divergence term taken by a quarter, plus the
  held-out samples as stand-ins for the positions that were not acquired, so that every position
  of k-space counts once. A quarter, because scores look at the magnitude, which sees half of the
  noise, inside the body, which holds about half of it; the whole term over-smooths (measured on
  open brain scans). Held-out samples are put in up to 8 classes of like inclusion probability, and
  a class stands for the positions of its range: 1/p - 1, which has the same mean, would leave the
  sum to a few samples of tiny p.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import Acquisition, blocks, frames_of, some_planes
from mrics.encoding.calibration import calibration_box
from mrics.encoding.noise import relative_covariance
from mrics.errors import AcquisitionError, RecoveryError
from mrics.numerics import stream

Array = NDArray[Any]
#: recovers an acquisition at a weight
Recover = Callable[[Acquisition, float], Array]
#: step of the probe, in units of sigma
PROBE_STEP = 0.1
#: share of the samples outside the calibration region that is held out
HELD_OUT = 0.05
#: share of the noise that scores of the magnitude inside the body see
NOISE_SHARE = 0.25
#: held-out samples of a class at least, and classes at most
_CLASS, _CLASSES = 4, 8


def misfit(acquisition: Acquisition, image: Array, weights: Array | None = None) -> float:
    """Energy of A x - d over the acquired samples, whitened channels summed.

    Parameters
    ----------
    acquisition : Acquisition
        With sensitivities where it has channels.
    image : ndarray of shape (plane, u, v)
    weights : ndarray of shape (plane or 1, u, v or 1), optional
        Of every sample's energy, centred like the masks.
    """
    total = 0.0
    for planes, encoding, data in blocks(acquisition):
        difference = encoding.forward(np.ascontiguousarray(image[planes]))
        data *= encoding.weights
        difference -= data
        energy = (difference.real**2 + difference.imag**2).sum(axis=1)
        if weights is not None:
            own = weights if len(weights) == 1 else weights[planes]
            # Plain shifts: `uncentre` would also turn the phase.
            energy *= np.roll(own, [-(n // 2) for n in own.shape[1:]], axis=(1, 2))
        total += float(energy.sum(dtype=np.float64))
    return total


def sample_count(acquisition: Acquisition) -> int:
    """Acquired samples of all planes and (virtual) channels."""
    count = 0
    for _, encoding, _ in blocks(acquisition):
        planes, channels, u, v = encoding.out_shape
        count += int(np.broadcast_to(encoding.mask, (planes, 1, u, v)).sum()) * channels
    return count


def stein_risk(
    acquisition: Acquisition, run: Recover, sigma: float, seed: int = 0
) -> Callable[[float], float]:
    """Risk of the measured samples as a function of the weight; two recoveries each."""
    divergence = _divergence(acquisition, run, sigma, seed)
    noise, samples = 2 * sigma**2, sample_count(acquisition)

    def risk(weight: float) -> float:
        image = run(acquisition, weight)
        fit = misfit(acquisition, image)
        return fit + noise * (divergence(weight, image) - samples)

    return risk


def _divergence(
    acquisition: Acquisition, run: Recover, sigma: float, seed: int
) -> Callable[[float, Array], float]:
    """Divergence of the recovered samples at a weight, given the image there.

    The second recovery sees the same planes, so random shifts are those of the same streams: they
    are frozen while the data change. Noise with a covariance is whitened by ``blocks``, where the
    probe has unit variance in every real part.
    """
    probe = _probe(acquisition, seed)
    step = PROBE_STEP * sigma
    moved = replace(acquisition, kspace=acquisition.kspace + step * probe.kspace)

    def divergence(weight: float, image: Array) -> float:
        change = run(moved, weight) - image
        product = 0.0
        for planes, encoding, data in blocks(probe):
            answer = encoding.forward(np.ascontiguousarray(change[planes]))
            product += float(np.vdot(data, answer).real)
        return product / step

    return divergence


def _probe(acquisition: Acquisition, seed: int) -> Acquisition:
    """Signs in every real and imaginary part of the acquired samples, coloured like the noise."""
    shape, dtype = acquisition.kspace.shape, acquisition.kspace.dtype
    real = acquisition.kspace.real.dtype
    parts = 2 * stream(seed, "probe").integers(0, 2, (*shape, 2)) - 1
    signs = np.ascontiguousarray(parts, real).view(dtype)[..., 0]
    if acquisition.covariance is not None and acquisition.channels > 1:
        psi = relative_covariance(acquisition.covariance, acquisition.channels)
        root = np.linalg.cholesky(psi).astype(dtype)
        signs = np.einsum("cd,pduv->pcuv", root, signs, optimize=True)
    # Turned with the data, so that data times a phase choose the same weight.
    largest = acquisition.kspace.ravel()[np.abs(acquisition.kspace).argmax()]
    signs *= largest / max(abs(largest), np.finfo(real).tiny)
    signs *= acquisition.mask[acquisition.pattern_index][:, None]
    return replace(acquisition, kspace=signs)


@dataclass(frozen=True)
class Split:
    """An acquisition without its held-out samples, and these alone.

    Attributes
    ----------
    kept, held : Acquisition
        Every plane has a mask of its own.
    chance : ndarray of shape (plane, u, v)
        Inclusion probability of every position; the share acquired outside the calibration region
        for patterns that do not state it.
    unseen : ndarray of shape (plane, u, v)
        At a held-out sample: how many positions that were not acquired it stands for; else 0.
    """

    kept: Acquisition
    held: Acquisition
    chance: NDArray[np.float64]
    unseen: NDArray[np.float64]


def split_samples(acquisition: Acquisition, seed: int = 0) -> Split:
    """Leave out 5 % of the samples outside the calibration region, others in every plane.

    Single samples also where the readout is full: so few lines are a twentieth of a 1-D pattern
    that their luck would choose the weight. Without a stated calibration region the largest fully
    sampled box around zero frequency is kept.

    Raises
    ------
    RecoveryError
        Where zero frequency is not acquired or nothing lies outside the calibration region.
    """
    try:
        rows, columns = calibration_box(acquisition)
    except AcquisitionError as error:
        raise RecoveryError(
            f"A weight cannot be chosen from this pattern. {error.what}",
            error.where,
            "Give the weight as a number (in units of sigma), or acquire the centre of k-space.",
        ) from error
    mask = np.empty(acquisition.shape, dtype=bool)
    mask[...] = acquisition.mask[acquisition.pattern_index]
    outside = np.ones(mask.shape[1:], dtype=bool)
    outside[rows, columns] = False
    held = np.zeros_like(mask)
    for plane, own in enumerate(mask):
        free = np.flatnonzero(own & outside)
        if len(free) > 1:
            count = max(1, round(HELD_OUT * len(free)))
            chosen = stream(seed, "held out", plane).choice(free, count, replace=False)
            held[plane].ravel()[chosen] = True
    if not held.any():
        raise RecoveryError(
            "No sample outside the calibration region can be held out to choose a weight by.",
            "mask",
            "Give the weight as a number (in units of sigma).",
        )
    chance = _chance(acquisition, mask, outside)
    unseen = np.zeros(mask.shape)
    unseen[held] = _stands_for(chance[held], chance[~mask])
    return Split(_masked(acquisition, mask & ~held), _masked(acquisition, held), chance, unseen)


def _chance(
    acquisition: Acquisition, mask: NDArray[np.bool_], outside: NDArray[np.bool_]
) -> NDArray[np.float64]:
    """Inclusion probability of every plane's positions."""
    given = acquisition.pattern.probability
    if given is None:
        acquired = (mask & outside).sum(axis=(1, 2)) / max(1, int(outside.sum()))
        return np.where(outside, acquired[:, None, None], 1.0)
    framed = given.reshape(-1, *acquisition.mask.shape[1:])
    index = acquisition.pattern_index if len(framed) > 1 else 0 * acquisition.pattern_index
    return np.broadcast_to(framed[index], mask.shape)


def _stands_for(held: NDArray[np.float64], unseen: NDArray[np.float64]) -> NDArray[np.float64]:
    """Positions never acquired that each held-out sample stands for, by inclusion probability.

    Positions of probability 0 (outside a shutter) have no sample like them and do not count.
    """
    parts = np.array_split(np.sort(held), int(np.clip(len(held) // _CLASS, 1, _CLASSES)))
    edges = [
        (low[-1] + high[0]) / 2 for low, high in itertools.pairwise(parts) if low[-1] < high[0]
    ]
    own = np.searchsorted(edges, held)
    counts = np.bincount(np.searchsorted(edges, unseen[unseen > 0]), minlength=len(edges) + 1)
    return (counts / np.bincount(own, minlength=len(counts)))[own]


def held_out_risk(split: Split, run: Recover) -> Callable[[float], float]:
    """Error of the held-out samples over their inclusion probability, one recovery each."""
    weights = 1 / np.maximum(split.chance, 1e-6)

    def risk(weight: float) -> float:
        return misfit(split.held, run(split.kept, weight), weights)

    return risk


def whole_risk(split: Split, run: Recover, sigma: float, seed: int = 0) -> Callable[[float], float]:
    """Error of all positions of k-space as a magnitude image shows it.

    The misfit of the samples kept with a quarter of Stein's term, plus what the held-out samples
    say of those never acquired. Two recoveries each, the second of one plane (of all where frames
    may be coupled), whose divergence stands for that of the others.
    """
    kept = split.kept
    one = kept if frames_of(kept) > 1 else some_planes(kept, [0])
    divergence = _divergence(one, run, sigma, seed)
    noise = NOISE_SHARE * 2 * sigma**2 * kept.shape[0] / one.shape[0]

    def risk(weight: float) -> float:
        image = run(kept, weight)
        measured = misfit(kept, image) + noise * divergence(weight, image[: one.shape[0]])
        return measured + misfit(split.held, image, split.unseen)

    return risk


def discrepancy(acquisition: Acquisition, run: Recover, sigma: float) -> Callable[[float], float]:
    """Square of the logarithm of misfit / noise energy: 0 where the misfit is the noise alone.

    Morozov 1966: M samples hold the noise energy 2 sigma^2 M.
    """
    expected = 2 * sigma**2 * sample_count(acquisition)

    def distance(weight: float) -> float:
        found = misfit(acquisition, run(acquisition, weight))
        return float(np.log(max(found, 1e-30 * expected) / expected) ** 2)

    return distance


def _masked(acquisition: Acquisition, mask: NDArray[np.bool_]) -> Acquisition:
    """The acquisition with a mask for every plane, zero outside it."""
    return replace(
        acquisition,
        kspace=acquisition.kspace * mask[:, None],
        mask=mask,
        pattern_index=np.arange(len(mask)),
    )
