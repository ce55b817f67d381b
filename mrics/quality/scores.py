"""Scores of a recovered image against its reference: NRMSE, PSNR, SSIM, HFEN.

With a = |image| and b = |reference| over the voxels of the mask (all voxels where it is None), and
L the largest b in the mask over the whole volume:

* ``nrmse`` = ||a - b|| / ||b||
* ``psnr`` = 20 log10(L / RMSE), RMSE the root of the mean of (a - b)^2; infinite without error
* ``ssim`` = mean over the mask of the SSIM map of the whole plane (see :mod:`.similarity`)
* ``hfen`` = ||LoG(a - b)|| / ||LoG(b)||, filtered on the whole plane (see :mod:`.detail`)
* ``nrmse_complex`` = ||image - reference|| / ||reference||, where both are complex

Nothing is rescaled and no phase is fitted. SSIM and HFEN work in planes: a volume is taken as the
stack of its planes along the first axis.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from mrics.errors import QualityError
from mrics.numerics import map_blocks
from mrics.quality._inputs import as_stack, largest, magnitude
from mrics.quality.detail import log_filter
from mrics.quality.similarity import ssim_map


class _Sums(NamedTuple):
    """Sums over one plane's mask voxels, from which every score is made."""

    voxels: float
    error: float
    reference: float
    ssim: float
    log_error: float
    log_reference: float
    complex_error: float


def score(
    image: NDArray[Any], reference: NDArray[Any], mask: NDArray[np.bool_] | None = None
) -> dict[str, float]:
    """Scores of an image against its reference, over all planes together.

    Parameters
    ----------
    image, reference : ndarray of shape (u, v) or (planes, u, v), real or complex
        Recovered image and reference, same unit. Computed in double precision.
    mask : ndarray of bool, same shape, or None
        Voxels that count; None for all.

    Returns
    -------
    dict of str to float
        ``nrmse``, ``psnr`` (dB), ``ssim``, ``hfen``; ``nrmse_complex`` where both are complex. The
        formulas stand in the module's docstring. ``psnr`` is infinite for an exact image, ``hfen``
        is 0 / 0 -> 0 and x / 0 -> infinite for a reference without detail.

    Raises
    ------
    QualityError
        For shapes that differ, values that are not finite, a mask without voxels, and a reference
        that is zero all over the mask.
    """
    stack, ref, inside = as_stack(image, reference, mask)
    data_range = largest(ref, inside)
    if data_range == 0.0:
        raise QualityError(
            "The reference is zero all over the mask, so no relative score can be made.",
            "reference",
            "Check that the right scan and mask were given.",
        )
    both_complex = np.iscomplexobj(stack) and np.iscomplexobj(ref)
    total = _Sums(*np.sum(_plane_sums(stack, ref, inside, data_range), axis=0).tolist())
    scores = _scores(total, data_range, both_complex)
    return {name: float(value) for name, value in scores.items() if value is not None}


def score_planes(
    image: NDArray[Any],
    reference: NDArray[Any],
    mask: NDArray[np.bool_] | None = None,
    data_range: float | None = None,
) -> list[dict[str, float | None]]:
    """Scores of every plane by itself, with one data range so that planes compare.

    Parameters
    ----------
    image, reference, mask
        As for :func:`score`, (planes, u, v).
    data_range : float or None
        L of PSNR and SSIM, positive; None for the reference's largest magnitude in the mask over
        the whole stack. Give the whole volume's where only some of its planes are scored.

    Returns
    -------
    list of dict
        One dict per plane with the keys of :func:`score`. In a plane without mask voxels every
        value is None; in one whose reference is zero over the mask ``nrmse``, ``hfen`` and
        ``nrmse_complex`` are None. Such planes are skipped and counted by what averages scores.

    Raises
    ------
    QualityError
        As for :func:`score`, and for a data range that is not positive.
    """
    stack, ref, inside = as_stack(image, reference, mask)
    span = largest(ref, inside) if data_range is None else float(data_range)
    if not span > 0.0:
        raise QualityError(
            f"The data range is {span:g}; it must be positive.",
            "data_range" if data_range is not None else "reference",
            "Give the largest magnitude of the reference inside the body.",
        )
    both_complex = np.iscomplexobj(stack) and np.iscomplexobj(ref)
    sums = _plane_sums(stack, ref, inside, span)
    return [_scores(one, span, both_complex) for one in sums]


def _plane_sums(
    image: NDArray[Any],
    reference: NDArray[Any],
    mask: NDArray[np.bool_] | None,
    data_range: float,
) -> list[_Sums]:
    both_complex = np.iscomplexobj(image) and np.iscomplexobj(reference)

    def one(index: int) -> _Sums:
        inside = True if mask is None else mask[index]
        voxels = image[index].size if mask is None else int(mask[index].sum())
        if voxels == 0:
            return _Sums(0, 0, 0, 0, 0, 0, 0)
        a, b = magnitude(image[index]), magnitude(reference[index])
        error = a - b
        complex_error = 0.0
        if both_complex:
            gap = image[index].astype(np.complex128) - reference[index]
            complex_error = _energy(gap.real, inside) + _energy(gap.imag, inside)
        return _Sums(
            voxels,
            _energy(error, inside),
            _energy(b, inside),
            float(ssim_map(a, b, data_range).sum(where=inside)),
            _energy(log_filter(error), inside),
            _energy(log_filter(b), inside),
            complex_error,
        )

    return map_blocks(one, range(len(image)))


def _energy(plane: NDArray[np.float64], inside: NDArray[np.bool_] | bool) -> float:
    return float(np.square(plane).sum(where=inside))


def _scores(sums: _Sums, data_range: float, both_complex: bool) -> dict[str, float | None]:
    scores: dict[str, float | None] = {"nrmse": None, "psnr": None, "ssim": None, "hfen": None}
    if both_complex:
        scores["nrmse_complex"] = None
    if sums.voxels == 0:
        return scores
    rmse = (sums.error / sums.voxels) ** 0.5
    scores["psnr"] = 20.0 * float(np.log10(data_range / rmse)) if rmse > 0.0 else float("inf")
    scores["ssim"] = sums.ssim / sums.voxels
    if sums.reference > 0.0:
        scores["nrmse"] = (sums.error / sums.reference) ** 0.5
        if both_complex:
            scores["nrmse_complex"] = (sums.complex_error / sums.reference) ** 0.5
        # Below this the filter's answer to a flat reference is rounding.
        if sums.log_reference > 1e-24 * sums.reference:
            scores["hfen"] = (sums.log_error / sums.log_reference) ** 0.5
        else:
            flat = sums.log_error <= 1e-24 * sums.reference
            scores["hfen"] = 0.0 if flat else float("inf")
    return scores
