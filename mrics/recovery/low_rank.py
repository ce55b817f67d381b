"""Low rank over frames: images of one place that are few images mixed.

X_b is the matrix of a block's pixels (rows) by frames (columns), ||.||_* the sum of singular
values. A block of n pixels and f frames has the scale s_b = sqrt(n) + sqrt(f): complex noise of
standard deviation sigma per real part has no singular value much above sqrt 2 sigma s_b.

``model = "local"`` (Trzasko & Manduca 2011, locally low rank), the mean over two tilings of the
plane by blocks, half a block apart and periodic:

    minimise  1/2 sum_f ||M_f F S x_f - d_f||^2 + weight sigma mean_tilings sum_b s_b ||X_b||_*

``model = "low-rank+sparse"`` (Otazo, Candes & Sodickson 2015, doi:10.1002/mrm.25240), the whole
plane as one block, T the orthonormal Fourier transform over frames:

    minimise  1/2 sum_f ||M_f F S (l_f + s_f) - d_f||^2
              + weight sigma ( s_b ||L||_* + sparse ||T S||_1 )

With ``sparse = 1`` the weights stand in about the ratio sqrt(n) : 1 of Candes, Li, Ma & Wright 2011
(doi:10.1145/1970392.1970395); a still image then costs about as much in either part, so that the
default is 2.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from mrics.encoding import frames_of
from mrics.encoding.acquisition import Acquisition
from mrics.errors import RecoveryError
from mrics.recovery.contract import Recovered
from mrics.recovery.convex import ITERATIONS, certify
from mrics.recovery.places import JointPenalty, run_places
from mrics.recovery.settings import LowRank
from mrics.recovery.singular import LocalLowRank, LowRankSparse


def solve(acquisition: Acquisition, settings: LowRank, sigma: float) -> Recovered:
    """Recover all frames of every place; see the module for the objectives.

    With "low-rank+sparse" ``extras`` hold the magnitude of both parts, shape (plane, u, v).
    """
    frames = frames_of(acquisition)
    if frames < 2:
        raise RecoveryError(
            f"Low rank over frames needs frames; this acquisition has {frames} frame of "
            f"{acquisition.shape[0]} planes.",
            "method",
            "Give a scan with a fourth axis (frames, echoes, contrasts), or choose another method.",
        )
    weight = float(settings.weight)
    extras: dict[str, Any] = {}
    local = settings.model == "local"
    if not local:
        extras = {name: np.zeros(acquisition.shape, np.float32) for name in ("low_rank", "sparse")}

    def make(grid: tuple[int, int], real: Any, count: int) -> JointPenalty:
        if local:
            return LocalLowRank(grid, real, count, settings.block)
        return LowRankSparse(grid, real, count, settings.sparse)

    def keep(penalty: JointPenalty, active: list[int], place: int, unit: float) -> None:
        if isinstance(penalty, LowRankSparse):
            for values, part in zip(extras.values(), penalty.parts, strict=True):
                by_frame = values.reshape(frames, -1, *values.shape[1:])
                by_frame[active, place] = unit * np.abs(part)

    image, results = run_places(
        acquisition,
        make,
        weight * sigma,
        settings.iterations or ITERATIONS,
        settings.tolerance,
        hybrid=True,
        finish=keep,
    )
    recovered = certify("low-rank", image, results, settings.tolerance, weight, settings.model)
    return replace(recovered, extras=extras)
