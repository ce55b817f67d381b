"""Best of N draws: the seed whose draw adds least to what the law does anyway."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from mrics.numerics import map_blocks
from mrics.sampling.grid import Field
from mrics.sampling.realise import Drawn
from mrics.sampling.spread_of_point import incoherent_peak, point_spread


def best_of(
    draw: Callable[[int], Drawn], probability: Field, number: int, by: str
) -> tuple[Drawn, dict[str, Any]]:
    """Draw ``number`` times and keep the draw with the lowest peak.

    Parameters
    ----------
    draw : callable
        Candidate n, n = 0 ... number - 1.
    probability : ndarray of float64
        Inclusion probabilities of one frame.
    number : int
        How many candidates.
    by : str
        "point-spread": the peak of the incoherent part
        (:func:`mrics.sampling.spread_of_point.incoherent_peak`). "wavelet-scales": the worst
        interference between detail scales of the transform point spread. Of a series of frames
        the worst counts.

    Returns
    -------
    Drawn
        The kept candidate.
    dict
        ``best_index``, ``best_peak``, ``median_peak``, ``best_gain`` (median / best) and
        ``law_shoulder``: the law's own largest value beside the point, the same for all.
    """

    def judged(index: int) -> tuple[Drawn, float]:
        drawn = draw(index)
        masks = drawn.mask if drawn.mask.ndim > probability.ndim else drawn.mask[None]
        if by == "wavelet-scales":
            from mrics.sampling.spread_of_wavelets import transform_spread

            return drawn, max(transform_spread(mask).worst for mask in masks)
        return drawn, max(incoherent_peak(mask, probability) for mask in masks)

    candidates = map_blocks(judged, range(number))
    peaks = np.array([peak for _, peak in candidates])
    index = int(np.argmin(peaks))
    law = np.abs(point_spread(probability))
    law[tuple(n // 2 for n in law.shape)] = 0.0
    median = float(np.median(peaks))
    return candidates[index][0], {
        "best_index": index,
        "best_peak": float(peaks[index]),
        "median_peak": median,
        "best_gain": median / float(peaks[index]) if peaks[index] > 0 else 1.0,
        "law_shoulder": float(law.max()),
    }
