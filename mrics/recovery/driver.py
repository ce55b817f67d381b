"""One entry for every recovery: checks, noise level, timing."""

from __future__ import annotations

import math
import time
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding.acquisition import Acquisition
from mrics.errors import RecoveryError
from mrics.numerics import one_blas_thread
from mrics.numerics.scaling import exponent_for, largest_part, times_power_of_two
from mrics.recovery.contract import Recovered
from mrics.recovery.fields import Settings
from mrics.recovery.registry import solver
from mrics.recovery.settings import check_settings
from mrics.recovery.weights import choose_weight

#: noise level taken where the data's own is 0, relative to the RMS of the calibration samples
SIGMA_FLOOR = 1e-4
#: extras and history of methods that are in the signal's unit
_SIGNALS = ("low_rank", "sparse", "residual", "noise")


def recover(
    acquisition: Acquisition,
    method: str = "wavelet",
    *,
    reference: NDArray[Any] | None = None,
    mask: NDArray[np.bool_] | None = None,
    **settings: Any,
) -> Recovered:
    """Recover a stack of planes from undersampled k-space.

    Parameters
    ----------
    acquisition : Acquisition
        Undersampled k-space with its pattern and noise level.
    method : str
        A name in ``METHODS``.
    reference : ndarray of shape (plane, u, v), optional
        Fully sampled image; read by ``weight = "best"`` alone.
    mask : ndarray of bool, same shape, optional
        Voxels that "best" counts.
    **settings
        Settings of the method (see ``mrics.recovery.settings``); without any it chooses its own
        weight.

    Returns
    -------
    Recovered
        ``image`` of shape (plane, u, v) and ``certificate``.

    Raises
    ------
    RecoveryError
        For unknown methods or settings, k-space with NaN or Inf, and weights that cannot be
        chosen (no centre of k-space, no reference for "best").

    Notes
    -----
    Every method is equivariant: ``recover(a y, |a| sigma) = a recover(y, sigma)`` for any complex
    ``a`` other than 0, to rounding.
    """
    chosen = check_settings(method, settings)
    # Work is spread over the threads by planes; those of linear algebra would spin beside them.
    with one_blas_thread():
        return _recovered(acquisition, method, chosen, reference, mask)


def _recovered(
    acquisition: Acquisition,
    method: str,
    chosen: Settings,
    reference: NDArray[Any] | None,
    mask: NDArray[np.bool_] | None,
) -> Recovered:
    started = time.perf_counter()
    largest = _survey(acquisition)
    empty = largest == 0
    exponent = exponent_for(largest)
    # Methods square samples in single precision.
    acquisition = acquisition.at_scale(exponent)
    if reference is not None and getattr(chosen, "weight", None) == "best":
        reference = times_power_of_two(reference, exponent)
    sigma, note = reference_sigma(acquisition)
    if empty:
        sigma, note = 0.0, "all acquired samples are zero; the image is zero"
    note = "; ".join(text for text in (note, _beyond_precision(acquisition, chosen)) if text)
    solve = solver(method)
    rule = ""
    if isinstance(getattr(chosen, "weight", None), str):
        weight, rule = 1.0, f"{getattr(chosen, 'weight')}: none, without signal"  # noqa: B009
        if not empty:
            choice = choose_weight(solve, acquisition, chosen, sigma, reference, mask)
            weight, rule = choice.weight, choice.rule
        number: Any = {"weight": weight}
        chosen = replace(chosen, **number)
    result = solve(acquisition, chosen, sigma)
    notes = "; ".join(text for text in (result.certificate.note, note) if text)
    certificate = replace(
        result.certificate,
        weight_rule=rule or result.certificate.weight_rule,
        note=notes,
        sigma=sigma,
        wall_s=time.perf_counter() - started,
    )
    return _scaled_back(replace(result, certificate=certificate), exponent)


def _scaled_back(result: Recovered, exponent: int) -> Recovered:
    """What was recovered at the scale 2**exponent, at the data's own."""
    if exponent == 0:
        return result
    own, history, extras = result.certificate, dict(result.history), dict(result.extras)
    for name, power in (("objective", 2), *((one, 1) for one in _SIGNALS)):
        if name in history:
            history[name] = [math.ldexp(one, -power * exponent) for one in history[name]]
    for name in set(_SIGNALS) & set(extras):
        extras[name] = times_power_of_two(extras[name], -exponent)
    objective = None if own.objective is None else math.ldexp(own.objective, -2 * exponent)
    sigma = math.ldexp(own.sigma, -exponent)
    return replace(
        result,
        image=times_power_of_two(result.image, -exponent),
        certificate=replace(own, objective=objective, sigma=sigma),
        history=history,
        extras=extras,
    )


def reference_sigma(acquisition: Acquisition) -> tuple[float, str]:
    """Noise level that weights refer to, and a note where it is not the data's own.

    Where the total sigma is 0 it is 1e-4 times the RMS of the calibration samples (of all
    acquired samples where there is no calibration region).
    """
    if acquisition.sigma > 0:
        return acquisition.sigma, ""
    kspace, mask = acquisition.kspace, acquisition.mask
    region = tuple(
        slice(n // 2 - c // 2, n // 2 - c // 2 + c) if c else slice(None)
        for n, c in zip(kspace.shape[2:], (*acquisition.calibration, 0)[:2], strict=True)
    )
    energy, count = 0.0, 0
    for plane in range(kspace.shape[0]):
        part = np.asarray(kspace[plane][(slice(None), *region)])
        acquired = np.broadcast_to(mask[acquisition.pattern_index[plane]], kspace.shape[2:])
        energy += float(np.vdot(part, part).real)
        count += int(acquired[region].sum()) * kspace.shape[1]
    floor = SIGMA_FLOOR * float(np.sqrt(energy / max(1, count)))
    return floor, f"noise level unknown (0): a floor of {SIGMA_FLOOR:g} x the RMS of the samples"


def _beyond_precision(acquisition: Acquisition, settings: Settings) -> str:
    """A note where a tolerance is asked for that rounding does not let anyone see."""
    tolerance = getattr(settings, "tolerance", None)
    least = 4 * float(np.finfo(acquisition.kspace.dtype).eps)
    if tolerance is None or tolerance >= least:
        return ""
    kind = acquisition.kspace.dtype
    return f"tolerance {tolerance:g} lies below the precision of {kind}, {least:.1g}"


def _survey(acquisition: Acquisition) -> float:
    """Check the samples plane by plane; their largest real or imaginary part."""
    largest = 0.0
    for plane in range(acquisition.kspace.shape[0]):
        samples = np.asarray(acquisition.kspace[plane])
        if not np.isfinite(samples).all():
            bad = ~np.isfinite(samples)
            first = (plane, *(int(i) for i in np.argwhere(bad)[0]))
            raise RecoveryError(
                f"K-space holds {int(bad.sum())} NaN or infinite samples in plane {plane}; "
                f"the first is {samples[first[1:]]} at index {first}.",
                "kspace, index (plane, channel, u, v)",
                "Remove or repair these samples before recovery.",
            )
        largest = max(largest, largest_part(samples))
    return largest
