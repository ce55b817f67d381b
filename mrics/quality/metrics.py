"""The table of measures: what each one means, its unit, and which way is better.

The protocol's acceptance keys are made from it (``<metric>_min`` where higher is better,
``<metric>_max`` where lower is better, ``<metric>_worst`` for the worst slice, ``<metric>_margin``
for non-inferiority and ``<metric>_equivalence`` for equivalence to the baseline arm), and the
report prints the definitions from it.
"""

from __future__ import annotations

import difflib
from dataclasses import dataclass
from types import MappingProxyType

from mrics.errors import QualityError


@dataclass(frozen=True)
class Metric:
    """One measure.

    Attributes
    ----------
    direction : str
        "lower" or "higher": which is better.
    definition : str
        The formula, as a report prints it.
    unit : str
        Unit, "1" for a plain ratio.
    label : str
        Name as a report prints it.
    plain : str
        One sentence on what it tells, for a reader who is no specialist.
    """

    direction: str
    definition: str
    unit: str
    label: str
    plain: str


@dataclass(frozen=True)
class AcceptanceKey:
    """What one key of a protocol's ``[acceptance]`` table limits.

    Attributes
    ----------
    metric : str
        Key of :data:`METRICS`.
    side : str
        "min" where the value must not fall below the limit, "max" where it must not exceed it.
    kind : str
        "mean" (limit on the scan mean), "worst" (on the worst slice), "margin" (largest acceptable
        loss against the baseline) or "equivalence" (largest difference either way).
    """

    metric: str
    side: str
    kind: str


_IN_MASK = "over the voxels of the body mask, magnitudes, no rescaling or phase fitting"

METRICS: MappingProxyType[str, Metric] = MappingProxyType(
    {
        "nrmse": Metric(
            "lower",
            f"||a - b|| / ||b|| {_IN_MASK}; a recovered, b reference",
            "1",
            "NRMSE",
            "Size of the error as a share of the size of the image.",
        ),
        "psnr": Metric(
            "higher",
            "20 log10(L / RMSE) "
            + _IN_MASK
            + "; L is the reference's largest magnitude in the mask over the whole volume",
            "dB",
            "PSNR",
            "Size of the error against the brightest voxel, in decibels.",
        ),
        "ssim": Metric(
            "higher",
            "Wang et al. 2004: Gaussian window of 11 x 11, sigma 1.5, K1 0.01, K2 0.03, "
            "population covariance, data range as for PSNR; computed on the whole plane, then "
            "averaged over the mask",
            "1",
            "SSIM",
            "Local likeness of brightness, contrast and structure; 1 is identical.",
        ),
        "hfen": Metric(
            "lower",
            "||LoG(a - b)|| / ||LoG(b)|| over the mask; LoG is the 15 x 15 Laplacian of a Gaussian "
            "of sigma 1.5 (Ravishankar and Bresler 2011), applied to the whole plane of "
            "magnitudes, edges mirrored",
            "1",
            "HFEN",
            "Size of the error in edges and fine detail as a share of the image's own.",
        ),
        "nrmse_complex": Metric(
            "lower",
            "||x - y|| / ||y|| over the mask, x and y the complex images (phase errors count)",
            "1",
            "complex NRMSE",
            "As NRMSE, with errors of phase counted too.",
        ),
    }
)


def acceptance_keys() -> dict[str, AcceptanceKey]:
    """Every key an ``[acceptance]`` table may hold that limits a measure."""
    keys = {}
    for name, metric in METRICS.items():
        side = "max" if metric.direction == "lower" else "min"
        keys[f"{name}_{side}"] = AcceptanceKey(name, side, "mean")
        for kind in ("worst", "margin", "equivalence"):
            keys[f"{name}_{kind}"] = AcceptanceKey(name, side, kind)
    return keys


def acceptance_key(key: str) -> AcceptanceKey:
    """What an acceptance key limits.

    Raises
    ------
    QualityError
        For an unknown key; the message names the nearest known one.
    """
    known = acceptance_keys()
    if key in known:
        return known[key]
    near = difflib.get_close_matches(key, known, n=1, cutoff=0.0)
    raise QualityError(
        f"Acceptance key {key!r} is not known.",
        f"[acceptance] {key}",
        f"Did you mean {near[0]!r}? Known keys: {', '.join(sorted(known))}.",
    )
