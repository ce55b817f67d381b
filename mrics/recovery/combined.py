"""L1 of wavelet coefficients and total variation together, two weights.

With K_l the undecimated bands of ``frame`` (full cycle spinning) and D periodic forward
differences, complex, on planes of any size:

    minimise  1/2 ||M F S x - d||^2
              + weight sigma ( sum_l 2^-l ||K_l x||_1 + variation sum_pixels |(D x)|_2 )

The two penalties as in Lustig, Donoho & Pauly 2007, doi:10.1002/mrm.21391;
``phase = "smooth"`` as in ``variation``.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding.acquisition import Acquisition
from mrics.recovery.contract import Recovered
from mrics.recovery.convex import ITERATIONS, certify, joined, phase_note, run_planes
from mrics.recovery.frame import FrameWavelet
from mrics.recovery.penalties import Variation, levels_for
from mrics.recovery.settings import WaveletVariation
from mrics.recovery.splitting import Penalty

Array = NDArray[Any]
#: threshold of the bands beside a variation
_THRESHOLD = 0.4


def solve(acquisition: Acquisition, settings: WaveletVariation, sigma: float) -> Recovered:
    """Recover every plane; see the module for the objective."""
    weight = float(settings.weight)
    levels = settings.levels or levels_for(acquisition.shape[1:])

    def make(grid: tuple[int, int], real: Any) -> Penalty:
        return Sum(
            FrameWavelet(grid, real, settings.wavelet, levels, threshold=_THRESHOLD),
            Variation(grid, real),
            settings.variation,
        )

    image, results = run_planes(
        acquisition,
        make,
        weight * sigma,
        settings.iterations or ITERATIONS,
        settings.tolerance,
        phase=settings.phase,
    )
    note = joined(f"variation {settings.variation:g} x the weight", phase_note(settings.phase))
    return certify("wavelet+variation", image, results, settings.tolerance, weight, note)


class Sum:
    """Two penalties on one plane, the second's weight ``share`` times the first's."""

    def __init__(self, first: Penalty, second: Penalty, share: float) -> None:
        self.first, self.second, self.share = first, second, share
        self.padded = first.padded
        self.symbol = np.zeros_like(first.symbol)
        self._pulled = np.empty((self.padded[0], 2 * self.padded[1]), self.symbol.dtype)

    def set_weight(self, weight: float, image: Array) -> None:
        """See :class:`splitting.Penalty`."""
        self.first.set_weight(weight, image)
        self.second.set_weight(weight * self.share, image)
        np.add(self.first.symbol, self.second.symbol, out=self.symbol)

    def pull(self, image: Array) -> None:
        """See :class:`splitting.Penalty`."""
        self.first.pull(image)
        self.second.pull(self._pulled)
        image += self._pulled

    def push(self, image: Array, relax: float) -> Array:
        """See :class:`splitting.Penalty`."""
        one, two = self.first.push(image, relax), self.second.push(image, relax)
        sums = one + two
        sums[1] = max(one[1], two[1])
        return sums
