"""Ideal observer on the k-space samples: the most that any recovery can show.

For a signal s (image), noise of standard deviation sigma per real part and channel covariance Psi,
and a background of covariance K' per real part,

    d'^2 = s^H E^H (Psi + E K' E^H)^-1 E s

One channel has a closed form: the sum over measured samples of |s_k|^2 / (S'_k + sigma^2). With
channels and B = E^H E of the whitened encoding it equals

    d'^2 = s^H w - sigma^2 w^H (sigma^2 K'^-1 + B)^-1 w,    w = K'^-1 s

whose second term is found by conjugate gradients, preconditioned by the same matrix with B replaced
by its mean; d'^2 is approached from above, with an error of second order in the residual.

A known background (K' = 0) always prefers the centre of k-space, so it is given as "noise only" and
never ranks patterns.

References
----------
Barrett and Myers 2004, Foundations of Image Science, chapter 13 (from memory).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import Encoding
from mrics.errors import QualityError
from mrics.numerics import centred_ifft, fft_planes, ifft_planes, map_blocks
from mrics.quality.observers.background import Spectrum
from mrics.quality.observers.tasks import Task
from mrics.sampling import Pattern

Array = NDArray[Any]
_ITERATIONS = 300
_TOLERANCE = 1e-4
_CANCELLATION = 300.0


@dataclass(frozen=True)
class Detectability:
    """d' of patterns and tasks.

    Attributes
    ----------
    tasks : tuple of Task
    anatomical : ndarray of shape (patterns, tasks)
        d' in the anatomical background; what patterns are ranked by.
    noise_only : ndarray of shape (patterns, tasks)
        d' in a known background, for information.
    """

    tasks: tuple[Task, ...]
    anatomical: Array
    noise_only: Array


def ideal_observer(
    patterns: Sequence[Pattern],
    tasks: Sequence[Task],
    shape: tuple[int, int],
    voxel_mm: tuple[float, float],
    sigma: float,
    spectrum: Spectrum,
    *,
    sensitivities: Array | None = None,
    site: tuple[int, int] | None = None,
) -> Detectability:
    """D' of the ideal observer for several patterns and tasks.

    Parameters
    ----------
    patterns : sequence of Pattern
        One frame each, on the grid (u,) or (u, v).
    tasks : sequence of Task
    shape : tuple of int
        (u, v).
    voxel_mm : tuple of float
        Voxel size along u and v.
    sigma : float
        Standard deviation of the real part of one k-space sample; of whitened data with channels.
    spectrum : Spectrum
        Of the anatomical background.
    sensitivities : ndarray of shape (channel, u, v), optional
        Whitened receive sensitivities; one uniform channel if left out.
    site : tuple of int, optional
        Voxel the feature sits at, which matters with channels; the middle if left out.

    Raises
    ------
    QualityError
        For patterns on another grid or with frames, sigma that is not positive, and sensitivities
        on another grid.
    """
    if not sigma > 0.0:
        raise QualityError(
            f"The ideal observer needs noise, got sigma = {sigma}.",
            "sigma",
            "Give the noise level of one k-space sample.",
        )
    masks = np.stack([_mask(pattern, shape) for pattern in patterns])
    signals = np.stack([task.kspace(shape, voxel_mm, site) for task in tasks])
    power = spectrum.on_grid(shape, voxel_mm)
    if sensitivities is not None and (
        sensitivities.ndim != 3 or sensitivities.shape[1:] != tuple(shape)
    ):
        raise QualityError(
            f"Sensitivities of shape {sensitivities.shape} are not on the grid {shape}.",
            "sensitivities (channel, u, v)",
            "Give sensitivities of one plane.",
        )
    anatomical, noise_only = detectability(masks, signals, power, sigma, sensitivities)
    return Detectability(tuple(tasks), np.sqrt(anatomical), np.sqrt(noise_only))


def detectability(
    masks: NDArray[np.bool_],
    signals: Array,
    power: Array,
    sigma: float,
    sensitivities: Array | None = None,
) -> tuple[Array, Array]:
    """d'^2 of shape (masks, signals), in the anatomical and in a known background.

    Parameters
    ----------
    masks : ndarray of bool, shape (masks, u, v)
        Centred.
    signals : ndarray of shape (signals, u, v), complex128
        Centred k-space.
    power : ndarray of shape (u, v)
        Background power per real part, centred, positive.
    sigma : float
    sensitivities : ndarray of shape (channel, u, v), optional
    """
    if sensitivities is not None:
        return _with_channels(masks, signals, power, sigma, sensitivities)
    energy = np.abs(signals) ** 2
    return _sampled(masks, energy / (power + sigma**2)), _sampled(masks, energy / sigma**2)


def _mask(pattern: Pattern, shape: tuple[int, int]) -> NDArray[np.bool_]:
    if pattern.frames or pattern.grid not in ((shape[0],), tuple(shape)):
        raise QualityError(
            f"A pattern on the grid {pattern.grid} with {pattern.frames} frames does not fit a "
            f"plane of {shape}.",
            "pattern",
            "Give a pattern of one frame on the plane's grid.",
        )
    mask = pattern.mask if len(pattern.grid) == 2 else pattern.mask[:, None]
    return np.broadcast_to(mask, shape)


def _sampled(masks: NDArray[np.bool_], weights: Array) -> Array:
    """Sums of weights (task, u, v) over masks (pattern, u, v)."""
    flat = weights.reshape(len(weights), -1)
    return np.asarray(masks.reshape(len(masks), -1).astype(np.float64) @ flat.T)


def _with_channels(
    masks: NDArray[np.bool_], signals: Array, power: Array, sigma: float, maps: Array
) -> tuple[Array, Array]:
    images = centred_ifft(signals)
    spectrum = np.roll(power, (-(power.shape[0] // 2), -(power.shape[1] // 2)), axis=(0, 1))
    readout = bool((masks == masks[:, :, :1]).all())
    held = masks[:, :, :1] if readout else masks
    held = np.roll(held, (-(held.shape[1] // 2), -(held.shape[2] // 2)), axis=(1, 2))
    mean = float((np.abs(maps) ** 2).sum(axis=0).mean())
    energy = np.abs(signals) ** 2
    # Where s^H w is far above d'^2 the difference needs double precision.
    far = (energy / power).sum(axis=(1, 2)) / (energy / (power + sigma**2 / mean)).sum(axis=(1, 2))
    kinds = [np.complex128 if ratio > _CANCELLATION else np.complex64 for ratio in far]

    def one(job: tuple[int, int]) -> tuple[float, float]:
        pattern, task = job
        encoding = Encoding(held[pattern][None, None], (1, *power.shape), kinds[task], maps[None])
        return _detectability(encoding, images[task][None], spectrum, sigma, mean)

    jobs = [(p, t) for p in range(len(masks)) for t in range(len(signals))]
    pairs = np.array(map_blocks(one, jobs)).reshape(len(masks), len(signals), 2)
    return pairs[..., 0], pairs[..., 1]


def _detectability(
    encoding: Encoding, signal: Array, power: Array, sigma: float, mean: float
) -> tuple[float, float]:
    """d'^2 with and without the background."""
    real = np.float32 if encoding.dtype == np.complex64 else np.float64
    prior = (sigma**2 / power).astype(real)
    share = float(encoding.mask.mean())
    inverse = (1.0 / (sigma**2 / power + mean * share)).astype(real)
    signal = signal.astype(encoding.dtype)
    known = _product(signal, encoding.normal(signal)) / sigma**2

    def filtered(image: Array, weights: Array) -> Array:
        return ifft_planes(fft_planes(image) * weights, overwrite=True)

    whitened = filtered(signal, (1.0 / power).astype(real))
    bound = _product(signal, whitened)
    residual = whitened.copy()
    direction = filtered(residual, inverse)
    strength = _product(residual, direction)
    taken = 0.0
    for _ in range(_ITERATIONS):
        if strength <= 0.0:
            break
        applied = filtered(direction, prior) + encoding.normal(direction)
        step = strength / _product(direction, applied)
        gain = sigma**2 * step * strength
        taken += gain
        if gain < _TOLERANCE * (bound - taken):
            break
        residual -= real(step) * applied
        better = filtered(residual, inverse)
        before, strength = strength, _product(residual, better)
        direction = better + real(strength / before) * direction
    return max(0.0, bound - taken), known


def _product(a: Array, b: Array) -> float:
    """Real part of <a, b>, summed in double precision."""
    return float((a.real * b.real + a.imag * b.imag).sum(dtype=np.float64))
