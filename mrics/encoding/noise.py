"""Noise of an acquisition: its level, its covariance between channels, whitening.

Convention: sigma is the standard deviation of the real part of one k-space sample, and
Psi = E[n n^H]/2 is the covariance of the real parts of circular noise. With Psi = L L^H,
whitened data L^-1 n has E[n n^H] = 2 I.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding.acquisition import Acquisition
from mrics.errors import AcquisitionError
from mrics.numerics import centred_ifft

Array = NDArray[Any]
#: median of |n| / sigma for complex white noise (Rayleigh): sqrt(2 ln 2)
_RAYLEIGH_MEDIAN = float(np.sqrt(2 * np.log(2)))
_OUTER_SHARE = 0.1
_LEAST_SAMPLES = 64
#: a median of so many samples is known to 1.2/sqrt(n) = 5 %, so the lowest is not low by luck
_LEAST_POOL = 500
#: border energy of central over outer k-space above which the border is not noise
_SIGNAL_RATIO = 1.5
#: share of the readout that counts as border, both ends together
BORDER_SHARE = 0.06
#: samples a channel that a covariance from the border needs: whitening by it then costs 2 % of SNR
_BORDER_SAMPLES = 25


def relative_covariance(covariance: Array, channels: int) -> Array:
    """A covariance scaled to a mean diagonal of 1, after checking that it can be one.

    Raises
    ------
    AcquisitionError
        Where it is of another size, not Hermitian or not positive definite.
    """
    psi = np.asarray(covariance, dtype=np.complex128)
    if psi.shape != (channels, channels):
        raise AcquisitionError(
            f"Noise covariance of shape {psi.shape} does not fit {channels} channels.",
            "covariance, axes (channel, channel)",
            f"Give a matrix of shape ({channels}, {channels}).",
        )
    if not np.allclose(psi, psi.conj().T, rtol=1e-6, atol=1e-9 * max(1e-300, np.abs(psi).max())):
        raise AcquisitionError(
            "Noise covariance is not Hermitian.",
            "covariance",
            "Give E[n n^H]/2, which equals its own conjugate transpose.",
        )
    lowest = float(np.linalg.eigvalsh(psi)[0])
    scale = float(np.trace(psi).real) / channels
    if not np.isfinite(lowest) or lowest <= 1e-12 * abs(scale):
        raise AcquisitionError(
            f"Noise covariance is not positive definite: its smallest eigenvalue is {lowest:.3g} "
            f"beside a mean variance of {scale:.3g}.",
            "covariance",
            "Use more noise samples than channels, or leave out dependent channels.",
        )
    return psi / scale


def noise_covariance(samples: Array) -> Array:
    """Psi from noise samples taken without signal.

    Parameters
    ----------
    samples : ndarray of shape (channel, ...), complex
        At least one sample more than there are channels. The mean is taken out.

    Returns
    -------
    ndarray of shape (channel, channel), complex128
        E[n n^H]/2; with m samples each real variance is known to sqrt(2/(m - 1)) of itself.

    Raises
    ------
    AcquisitionError
        For real or too few samples, NaN, and covariances that are not positive definite.
    """
    if samples.ndim < 2 or not np.iscomplexobj(samples):
        raise AcquisitionError(
            f"Noise samples must be complex of shape (channel, samples), got {samples.dtype} of "
            f"shape {samples.shape}.",
            "noise",
            "Give the complex samples of a scan without excitation.",
        )
    channels = samples.shape[0]
    flat = samples.reshape(channels, -1).astype(np.complex128)
    count = flat.shape[1]
    if count <= channels:
        raise AcquisitionError(
            f"{count} noise samples are too few for {channels} channels: the covariance would not "
            "be positive definite.",
            "noise",
            f"Give at least {channels + 1}, better 1000 or more.",
        )
    if not np.isfinite(flat).all():
        raise AcquisitionError(
            f"Noise samples hold {int((~np.isfinite(flat)).sum())} NaN or infinite values.",
            "noise",
            "Leave them out.",
        )
    flat -= flat.mean(axis=1, keepdims=True)
    psi = flat @ flat.conj().T / (2 * (count - 1))
    relative_covariance(psi, channels)
    return psi


def border_noise(acquisition: Acquisition, share: float = BORDER_SHARE) -> tuple[Array | None, str]:
    """Covariance of the border where it holds noise alone, and where it came from in words.

    Returns
    -------
    covariance : ndarray of shape (channel, channel) or None
        None where the border holds signal, is too small, or cannot be told: channels are then
        taken to be uncorrelated and of equal noise.
    text : str
        One clause for a report.
    """
    try:
        psi = border_covariance(acquisition, share)
    except AcquisitionError as error:
        reason = error.what.rstrip(".")
        reason = reason[0].lower() + reason[1:]
        return (
            None,
            f"noise covariance unknown, channels taken as uncorrelated and equal ({reason})",
        )
    return psi, "noise covariance from the border of the image along the readout"


def border_covariance(acquisition: Acquisition, share: float = BORDER_SHARE) -> Array:
    """Psi from the image border along the readout, where the object does not reach.

    The readout is never undersampled, so its two ends are free of folded signal. With a full
    readout in the plane (1-D patterns) the acquired lines are transformed along v and both ends
    are taken; in 3-D the first and last planes of each frame.

    Parameters
    ----------
    acquisition : Acquisition
        Multi-channel data.
    share : float
        Share of the readout that counts as border, both ends together.

    Raises
    ------
    AcquisitionError
        Where the border holds signal (its energy is not even over k-space, or not the same at both
        ends), or the stack has no readout axis.
    """
    rows_only = acquisition.mask.shape[2] == 1
    planes, u, v = acquisition.shape
    three_d = acquisition.axes is not None and acquisition.axes.partition is not None
    if not rows_only and not three_d:
        raise AcquisitionError(
            "A bare stack with a 2-D pattern does not say where its readout ends are.",
            "axes",
            "Give noise samples, or the axes of the scan.",
        )
    frames = acquisition.volume_shape[3] if len(acquisition.volume_shape) == 4 else 1
    length = v if rows_only else planes // frames
    edge = max(1, round(share * length / 2))
    ends = np.r_[0:edge, length - edge : length]
    inner, outer = [], []
    energy: tuple[list[Array], list[Array]] = ([], [])
    chosen = list(range(planes))
    if not rows_only:
        chosen = [f * length + int(e) for f in range(frames) for e in ends]
    near = np.abs(np.arange(u) - u // 2) <= u // 16
    if not rows_only:
        near = near[:, None] & (np.abs(np.arange(v) - v // 2) <= v // 16)[None]
    for plane in chosen:
        mask = acquisition.mask[acquisition.pattern_index[plane]]
        data = np.asarray(acquisition.kspace[plane])
        if rows_only:
            data, mask = centred_ifft(data, axes=(-1,))[:, :, ends], mask[:, 0]
            for side, part in enumerate(np.split(data[:, mask], 2, axis=2)):
                energy[side].append(part.reshape(len(data), -1))
        else:
            energy[int(plane % length >= edge)].append(data[:, mask])
        flat = [data[:, mask & part].reshape(len(data), -1) for part in (near, ~near)]
        inner.append(flat[0])
        outer.append(flat[1])
    low, high = np.concatenate(inner, axis=1), np.concatenate(outer, axis=1)
    ratio = _mean_energy(low) / max(_mean_energy(high), 1e-300)
    if ratio > _SIGNAL_RATIO:
        raise AcquisitionError(
            f"The border holds signal: its central k-space has {ratio:.3g} times the energy of the "
            "rest.",
            f"readout border, {2 * edge} of {length} positions",
            "Give noise samples, or a smaller share.",
        )
    _check_sides([np.concatenate(side, axis=1) for side in energy])
    samples = np.concatenate([low, high], axis=1)
    least = _BORDER_SAMPLES * len(samples)
    if samples.shape[1] < least:
        raise AcquisitionError(
            f"The border holds {samples.shape[1]} samples, too few for {len(samples)} channels "
            f"({least} are needed).",
            f"readout border, {2 * edge} of {length} positions",
            "Give noise samples, or a larger share.",
        )
    return noise_covariance(samples)


def _check_sides(sides: list[Array]) -> None:
    """Receiver noise is the same at both ends of the readout in every channel."""
    one, two = ((side.real**2 + side.imag**2).mean(axis=1) for side in sides)
    lowest = np.maximum(np.minimum(one, two), 1e-300)
    ratio = np.maximum(one, two) / lowest
    # A mean of n energies is known to 1/sqrt(n): five of its standard deviations.
    allowed = max(_SIGNAL_RATIO, 1 + 5 * np.sqrt(2 / sides[0].shape[1]))
    if ratio.max() > allowed:
        channel = int(np.argmax(ratio))
        raise AcquisitionError(
            f"Channel {channel} has {ratio[channel]:.3g} times the energy at one end of the "
            "readout, so the border does not hold receiver noise alone.",
            "readout border",
            "Give noise samples.",
        )


def _mean_energy(samples: Array) -> float:
    return float((samples.real**2 + samples.imag**2).mean()) if samples.size else 0.0


def whitening(covariance: Array) -> Array:
    """Matrix W = L^-1 of the Cholesky factor Psi = L L^H, so that W Psi W^H = I."""
    psi = np.asarray(covariance, dtype=np.complex128)
    factor = np.linalg.cholesky(psi)
    return np.linalg.solve(factor, np.eye(len(psi)))


def estimate_sigma(acquisition: Acquisition) -> float:
    """Noise level from where measured k-space holds least signal.

    Samples are pooled in places where an object may be absent: the outer tenth of the acquired
    samples in four bands by distance from the centre (each over four groups of neighbouring
    planes), and, where the readout is full, sixteen stretches of the readout after transforming
    it. Each pool gives the median modulus over sqrt(2 ln 2) (Rayleigh median); the lowest counts,
    since signal can only add. At most 16 planes spread over the stack are read.

    Parameters
    ----------
    acquisition : Acquisition
        Measured or simulated data with at least 64 acquired samples a plane.

    Returns
    -------
    float
        Standard deviation of the real part of one k-space sample, root mean square over channels.

    Raises
    ------
    AcquisitionError
        Where too few samples are acquired.
    """
    planes, u, v = acquisition.shape
    chosen = np.unique(np.linspace(0, planes - 1, min(planes, 16)).round().astype(int))
    radius = np.hypot(
        (np.arange(u)[:, None] - u // 2) / (u / 2), (np.arange(v)[None, :] - v // 2) / (v / 2)
    )
    pools: dict[tuple[str, int, int], list[Array]] = {}
    for number, plane in enumerate(chosen):
        own = acquisition.mask[acquisition.pattern_index[plane]]
        rows, columns = np.nonzero(np.broadcast_to(own, (u, v)))
        if len(rows) < _LEAST_SAMPLES:
            raise AcquisitionError(
                f"{len(rows)} acquired samples in plane {plane} are too few to estimate noise.",
                "mask",
                f"Give sigma, or acquire at least {_LEAST_SAMPLES} samples.",
            )
        outer = np.argsort(radius[rows, columns], kind="stable")
        outer = outer[-max(_LEAST_SAMPLES // 2, int(_OUTER_SHARE * len(rows))) :]
        data = np.asarray(acquisition.kspace[plane])
        modulus = np.abs(data[:, rows[outer], columns[outer]])
        group = number * 4 // len(chosen)
        for band, part in enumerate(np.array_split(modulus, 4, axis=1)):
            pools.setdefault(("outer", group, band), []).append(part)
        if own.shape[1] == 1:
            lines = np.abs(centred_ifft(data[:, own[:, 0]], axes=(-1,)))
            for stretch, part in enumerate(np.array_split(lines, 16, axis=2)):
                flat = part.reshape(len(part), -1)
                pools.setdefault(("readout", 0, stretch), []).append(flat)
    joined = {key: np.concatenate(parts, axis=1) for key, parts in pools.items()}
    enough = [pool for pool in joined.values() if pool.shape[1] >= _LEAST_POOL]
    if not enough:
        outer_pools = [pool for key, pool in joined.items() if key[0] == "outer"]
        enough = [np.concatenate(outer_pools, axis=1)]
    medians = np.array([np.median(pool, axis=1) for pool in enough]) / _RAYLEIGH_MEDIAN
    return float(np.sqrt((medians.min(axis=0) ** 2).mean()))
