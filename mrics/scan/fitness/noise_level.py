"""Too much noise for a reference, two estimates that disagree, or none at all."""

from __future__ import annotations

import numpy as np

from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.view import ScanView
from mrics.scan.fitness.zero_fill import measured_matrix

LEAST_SNR = 8.0
MOST_SNR = 150.0
AGREE = 0.6


def signal(view: ScanView) -> float:
    """Mean magnitude inside the body."""
    return float(view.magnitude[view.mask].mean(dtype=np.float64))


def low_snr(view: ScanView) -> tuple[Finding, ...]:
    """SNR (mean magnitude in the body / sigma) below 8 by both estimates that are at hand."""
    estimates = {name: noise.sigma for name, noise in view.noise_estimates.items()}
    snr = {name: signal(view) / sigma for name, sigma in estimates.items() if sigma > 0}
    if not snr or max(snr.values()) >= LEAST_SNR:
        return ()
    told = ", ".join(f"{value:.1f} by {name}" for name, value in snr.items())
    return (
        Finding(
            code="low-snr",
            what=f"The SNR is low: {told}.",
            where="body",
            statistic=max(snr.values()),
            threshold=LEAST_SNR,
            bias="Scores compare noise with noise: the reference's own noise sets a floor of "
            "error and hides what undersampling does.",
            advice="Average more, or judge only what stands above the noise floor in the report.",
        ),
    )


def noise_disagrees(view: ScanView) -> tuple[Finding, ...]:
    """Noise in the body is lower than that of air: air was treated otherwise, or noise is coloured.

    Anatomy can only raise the estimate in the body, so the other direction says nothing.
    """
    estimates = view.noise_estimates
    if "air" not in estimates:
        return ()
    ratio = estimates["detail"].sigma / estimates["air"].sigma
    if ratio >= AGREE:
        return ()
    return (
        Finding(
            code="noise-disagrees",
            what=f"Fine detail in the body has {ratio:.2f} of the noise that air has.",
            where="body against air",
            statistic=ratio,
            threshold=AGREE,
            bias="The body was smoothed or the noise is not white, so the SNR of the measurement "
            "is not known and undersampling looks better than it is.",
            advice="State sigma from a noise scan or from repeats; see the other findings for "
            "what was done.",
        ),
    )


def template_like(view: ScanView) -> tuple[Finding, ...]:
    """Less fine detail than one scan's noise would leave: averaged, denoised or a template."""
    if any(measured_matrix(view, axis) is not None for axis in view.encoded):
        return ()  # an interpolated grid has no finest detail
    sigma = max(noise.sigma for noise in view.noise_estimates.values())
    snr = signal(view) / sigma if sigma > 0 else np.inf
    if snr <= MOST_SNR:
        return ()
    return (
        Finding(
            code="template-like",
            what=f"Mean magnitude is {snr:.0f} times the noise and finest detail, more than one "
            "scan gives: an average, a template, or heavily denoised.",
            where="body",
            statistic=float(min(snr, 1e9)),
            threshold=MOST_SNR,
            bias="There is neither noise nor individual fine detail to lose: every method looks "
            "far better than on a patient's scan.",
            advice="Use single scans as references; keep this one for timing only.",
            remedy="add_noise",
        ),
    )
