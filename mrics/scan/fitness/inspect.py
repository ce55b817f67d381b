"""All checks of a scan, run in order."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

from mrics.numerics import one_blas_thread
from mrics.scan.fitness.background import exact_zeros
from mrics.scan.fitness.borders import ghosting, wrapped
from mrics.scan.fitness.combined import root_sum_of_squares
from mrics.scan.fitness.compression import block_compression
from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.frames import identical_frames
from mrics.scan.fitness.levels import clipped, coarse_levels
from mrics.scan.fitness.negative import negative_values
from mrics.scan.fitness.noise_level import low_snr, noise_disagrees, signal, template_like
from mrics.scan.fitness.noise_map import noise_varies
from mrics.scan.fitness.partial import LEAST_SAMPLES, partial_fourier
from mrics.scan.fitness.phase import magnitude_only
from mrics.scan.fitness.smoothing import smoothed_noise
from mrics.scan.fitness.spectrum import LEAST_BLOCKS
from mrics.scan.fitness.view import ScanView
from mrics.scan.fitness.zero_fill import zero_filled
from mrics.scan.noise import Noise
from mrics.scan.volume import LETTERS, Axes, Scan

CHECKS: tuple[Callable[[ScanView], tuple[Finding, ...]], ...] = (
    zero_filled,
    partial_fourier,
    smoothed_noise,
    negative_values,
    exact_zeros,
    noise_varies,
    clipped,
    coarse_levels,
    block_compression,
    magnitude_only,
    root_sum_of_squares,
    low_snr,
    noise_disagrees,
    template_like,
    ghosting,
    wrapped,
    identical_frames,
)


@dataclass(frozen=True)
class Inspection:
    """All that a look at a scan told.

    Attributes
    ----------
    findings : tuple of Finding
        What was found; empty does not prove that nothing was done.
    cannot_be_told : tuple of str
        What this scan does not show either way, and why.
    snr : float
        Mean magnitude in the body mask / sigma.
    noise : Noise
        Sigma and how it was found.
    """

    findings: tuple[Finding, ...]
    cannot_be_told: tuple[str, ...]
    snr: float
    noise: Noise


def inspect_scan(scan: Scan, axes: Axes | None = None) -> tuple[Finding, ...]:
    """The findings of :func:`inspect_fully`."""
    return inspect_fully(scan, axes).findings


def inspect_fully(scan: Scan, axes: Axes | None = None) -> Inspection:
    """Look for traces of what was done to a scan before it came here.

    Parameters
    ----------
    scan : Scan
        The scan; checks look at its first frame and channel unless they say otherwise.
    axes : Axes, optional
        Names of readout, phase and partition axes (readout i, phase j, 2-D where not given).

    Returns
    -------
    Inspection
        Findings, what cannot be told, SNR and noise.
    """
    view = ScanView(scan, axes if axes is not None else Axes())
    # Products are small: waiting for threads of linear algebra would cost more than they bring.
    with one_blas_thread():
        findings = tuple(finding for check in CHECKS for finding in check(view))
    sigma = view.noise.sigma
    snr = signal(view) / sigma if sigma > 0 else float("inf")
    noise = replace(view.noise, sigma=math.ldexp(sigma, -view.exponent))
    return Inspection(findings, _cannot_be_told(view), snr, noise)


def _cannot_be_told(view: ScanView) -> tuple[str, ...]:
    told = [
        "Averaging of a few repeats, motion correction by whole voxels and denoising that leaves "
        "white noise have no trace.",
    ]
    if not view.has_phase:
        told.append(
            "Partial Fourier filled in by a phase-corrected method (homodyne, projections), and "
            "zero-filling or filters of less than a fifth of the axis, leave next to no trace in "
            "a magnitude image."
        )
        for axis in view.encoded:
            spectrum = view.detail_spectrum(axis)
            if spectrum is None:
                told.append(
                    f"Zero-filling and partial Fourier along {LETTERS[axis]}: no lines of 32 "
                    "voxels lie inside the body."
                )
            elif len(spectrum.frequency) < LEAST_SAMPLES:
                told.append(
                    f"Partial Fourier along {LETTERS[axis]}: lines inside the body are shorter "
                    f"than {2 * LEAST_SAMPLES} voxels."
                )
    for axis in range(3):
        if view.correlation(axis) is None:
            told.append(
                f"Filtering and interpolation along {LETTERS[axis]}: fewer than {LEAST_BLOCKS} "
                "blocks of 8 x 8 voxels show noise alone."
            )
    if "air" not in view.noise_estimates:
        told.append("Root-sum-of-squares and ghosts: there is no air with noise in it.")
    return tuple(told)
