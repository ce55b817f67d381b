"""All checks of a scan, run in order."""

from __future__ import annotations

from collections.abc import Callable

from mrics.scan.fitness.background import exact_zeros
from mrics.scan.fitness.borders import ghosting, wrapped
from mrics.scan.fitness.combined import root_sum_of_squares
from mrics.scan.fitness.compression import block_compression
from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.frames import identical_frames
from mrics.scan.fitness.levels import clipped, coarse_levels
from mrics.scan.fitness.noise_level import low_snr, noise_disagrees, template_like
from mrics.scan.fitness.noise_map import noise_varies
from mrics.scan.fitness.partial import partial_fourier
from mrics.scan.fitness.phase import magnitude_only
from mrics.scan.fitness.smoothing import smoothed_noise
from mrics.scan.fitness.view import ScanView
from mrics.scan.fitness.zero_fill import zero_filled
from mrics.scan.volume import Axes, Scan

CHECKS: tuple[Callable[[ScanView], tuple[Finding, ...]], ...] = (
    zero_filled,
    partial_fourier,
    smoothed_noise,
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


def inspect_scan(scan: Scan, axes: Axes | None = None) -> tuple[Finding, ...]:
    """Look for traces of what was done to a scan before it came here.

    Parameters
    ----------
    scan : Scan
        The scan; checks look at its first frame and channel unless they say otherwise.
    axes : Axes, optional
        Names of readout, phase and partition axes (readout i, phase j, 2-D where not given).

    Returns
    -------
    tuple of Finding
        Empty where nothing was found, which does not prove that nothing was done.
    """
    view = ScanView(scan, axes if axes is not None else Axes())
    return tuple(finding for check in CHECKS for finding in check(view))
