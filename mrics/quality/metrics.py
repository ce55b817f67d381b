"""The table of measures: what each one means, its unit, and which way is better.

The protocol's acceptance keys are made from it (``<metric>_min`` where higher is better,
``<metric>_max`` where lower is better, ``<metric>_worst`` for the worst slice, ``<metric>_margin``
for non-inferiority and ``<metric>_equivalence`` for equivalence to the baseline arm), and the
report prints the definitions from it.
"""

from __future__ import annotations

import difflib
from dataclasses import dataclass
from importlib import import_module
from types import MappingProxyType
from typing import TYPE_CHECKING, Any

from mrics.errors import QualityError

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray


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
    function : str
        "module:function" of this room where the measure is taken by itself: called with image and
        reference (plane, u, v), mask and data range, it gives a value, or None, for every plane.
        Empty for measures that come out of one computation with others.
    """

    direction: str
    definition: str
    unit: str
    label: str
    plain: str
    function: str = ""


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
        "ms_ssim": Metric(
            "higher",
            "Wang, Simoncelli, Bovik 2003: product over up to 5 scales of the mean "
            "contrast-structure term of SSIM, with SSIM at the coarsest; means over the mask",
            "1",
            "MS-SSIM",
            "As SSIM, judged from fine to coarse detail.",
        ),
        "gmsd": Metric(
            "lower",
            "Xue et al. 2014: standard deviation over the mask of the similarity "
            "(2 g h + c) / (g^2 + h^2 + c) of the gradient magnitudes at half resolution, "
            "c = 170 / 255^2 L^2",
            "1",
            "gradient deviation",
            "How unevenly edges are kept; 0 is identical.",
        ),
        "nrmse_patch": Metric(
            "lower",
            "largest RMS error of a 16 x 16 patch over the RMS of the reference in the mask",
            "1",
            "NRMSE, worst patch",
            "Size of the error in the worst small region.",
        ),
        "ssim_patch": Metric(
            "higher",
            "lowest mean SSIM of a 16 x 16 patch",
            "1",
            "SSIM, worst patch",
            "Likeness in the worst small region.",
        ),
        "error_fine": Metric(
            "lower",
            "norm of the error over the norm of the reference in the outer half of k-space",
            "1",
            "error in fine detail",
            "Size of the error in the finest detail as a share of that detail.",
        ),
        "error_measured": Metric(
            "lower",
            "||P (x - y)|| / ||y||, P what the acquisition determines (one channel: the projector "
            "on the measured samples)",
            "1",
            "error in measured part",
            "Error in what was measured: noise, and detail the recovery smoothed away.",
        ),
        "error_missing": Metric(
            "lower",
            "norm of (1 - beta) b over ||y||, b the unmeasured part of the reference and beta the "
            "share of it in the recovered image, per wavelet band and window",
            "1",
            "missing detail",
            "Unmeasured detail of the reference that the image does not show.",
        ),
        "error_invented": Metric(
            "lower",
            "norm of a - beta b over ||y||, a the unmeasured part of the recovered image: what has "
            "nothing of the reference in it",
            "1",
            "invented detail",
            "Unmeasured detail the image shows that is not in the reference.",
        ),
        "noise_ratio": Metric(
            "lower",
            "median over the mask of the replicas' standard deviation over that of full sampling "
            "(Robson et al. 2008); of a recovery that is not linear it holds for this image at "
            "this noise only",
            "1",
            "noise against the full scan",
            "Noise compared with the full scan, which takes R times as long.",
        ),
        "noise_gain": Metric(
            "lower",
            "noise ratio / sqrt(R)",
            "1",
            "noise gain",
            "Noise compared with a full scan of equal acquisition time.",
        ),
        "resolution_u_mm": Metric(
            "lower",
            "median full width at half maximum along the phase axis of the response to a small "
            "point (Chan and Haldar 2021)",
            "mm",
            "resolution along phase",
            "How wide a point becomes along the phase axis.",
        ),
        "resolution_v_mm": Metric(
            "lower",
            "the same along the other in-plane axis (partition in 3-D, readout in 2-D)",
            "mm",
            "resolution along the other axis",
            "How wide a point becomes along the other axis.",
        ),
        "edge_blur": Metric(
            "lower",
            "median of the 10 to 90 % rise of edges over that of the same edges in the reference",
            "1",
            "edge blur",
            "How much wider edges became; 1 is unchanged.",
        ),
        "feature_retention": Metric(
            "higher",
            "Re <f, d> / <f, f> of an inserted feature f and the recovered one d, mean over sites, "
            "of the feature that is kept least",
            "1",
            "feature retention",
            "Share of a small feature's contrast that survives; 1 is all of it.",
        ),
        "feature_shift_mm": Metric(
            "lower",
            "median length of the shift that fits recovered to inserted features best",
            "mm",
            "feature displacement",
            "How far small features are moved from where they are.",
        ),
        "region_bias": Metric(
            "lower",
            "largest |mean - reference mean| / reference mean of the labelled regions of a plane",
            "1",
            "region bias",
            "How far the brightness of a labelled region is off, at worst.",
        ),
        "region_cnr": Metric(
            "higher",
            "smallest ratio over the labelled regions of a plane of CNR to the reference's CNR; "
            "CNR = |mean - background mean| / root of the mean of both variances",
            "1",
            "region CNR kept",
            "How well the regions still stand out from the background region, at worst.",
        ),
        "observer_auc": Metric(
            "higher",
            "area under the ROC curve of a channelised Hotelling observer of recovered images for "
            "a small feature in an anatomical background",
            "1",
            "observer AUC",
            "How often an observer tells an image with the feature from one without.",
        ),
        "observer_efficiency": Metric(
            "higher",
            "(d' of that observer / d' of the ideal observer on the k-space samples)^2, one task "
            "and the same backgrounds; an estimate from few images may pass 1 by chance",
            "1",
            "observer efficiency",
            "Share of what the data hold on the feature that the image shows.",
        ),
    }
)


#: taken in every study; the others where ``[quality]`` asks for them
SCORES = frozenset({"nrmse", "psnr", "ssim", "hfen", "nrmse_complex"}) | {
    name for name, metric in METRICS.items() if metric.function
}


def taken_alone(
    image: NDArray[Any],
    reference: NDArray[Any],
    mask: NDArray[np.bool_] | None = None,
    data_range: float | None = None,
) -> list[dict[str, float | None]]:
    """Values of every plane of those measures that have a function of their own.

    Parameters
    ----------
    image, reference, mask, data_range
        As for :func:`mrics.quality.score_planes`.
    """
    rows: list[dict[str, float | None]] = [{} for _ in reference]
    for name, metric in METRICS.items():
        if metric.function:
            module, _, function = metric.function.partition(":")
            measure = getattr(import_module(f"mrics.quality.{module}"), function)
            values = measure(image, reference, mask, data_range)
            for row, value in zip(rows, values, strict=True):
                row[name] = None if value is None else float(value)
    return rows


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
