"""Lossy compression in blocks of 8 x 8: cosine coefficients on a lattice."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.view import ScanView

# 1 - smallest / second smallest detail level over the 64 positions of the grid.
FALL = 0.2
# Share of the largest value below which detail is rounding.
_ROUNDING = 1e-5
_PLANES = 5
_LEAST_BLOCKS = 150
_MOST_BLOCKS = 1500


def block_compression(view: ScanView) -> tuple[Finding, ...]:
    """At one position of an 8 x 8 grid, fine cosine coefficients vanish as at no other.

    Baseline JPEG (ITU-T T.81) rounds the cosine coefficients of 8 x 8 blocks, most of the fine
    ones to zero. The lower 15 % point of their modulus over all blocks is compared between the 64
    positions of the grid; without compression it is the same everywhere.
    """
    parts = [view.magnitude, view.volume.real] if view.has_phase else [view.magnitude]
    fall, at = max(_fall(part) for part in parts)
    if fall <= FALL:
        return ()
    return (
        Finding(
            code="block-compression",
            what="Fine detail is rounded away in blocks of 8 x 8 voxels (grid starting at "
            f"{at[0]}, {at[1]}): the image went through lossy compression.",
            where="planes (i, j)",
            statistic=fall,
            threshold=FALL,
            bias="Compressed images are sparse by construction, so sparse recovery is flattered.",
            advice="Use the uncompressed original; nothing brings the lost detail back.",
            remedy="add_noise",
        ),
    )


def _fall(part: NDArray[Any]) -> tuple[float, tuple[int, int]]:
    if min(part.shape[:2]) < 24:
        return 0.0, (0, 0)
    depth = part.shape[2]
    chosen = np.unique(np.linspace(depth // 4, max(depth - depth // 4 - 1, 0), _PLANES).astype(int))
    planes = part[:, :, chosen].transpose(2, 0, 1).astype(np.float32)
    fine = _fine_cosines().astype(np.float32)
    levels = np.full((8, 8), np.inf)
    for row in range(8):
        for column in range(8):
            blocks = _blocks(planes[:, row:, column:])
            if len(blocks) < _LEAST_BLOCKS:
                return 0.0, (0, 0)
            rank = int(0.15 * len(blocks))
            size = np.partition(np.abs(blocks @ fine), rank, axis=0)[rank]
            levels[row, column] = np.exp(np.log(size + 1e-12 * np.abs(part).max()).mean())
    order = np.argsort(levels, axis=None)
    row, column = divmod(int(order[0]), 8)
    smallest, second = levels.ravel()[order[:2]]
    if second < _ROUNDING * np.abs(part).max():
        return 0.0, (0, 0)
    return float(1 - smallest / second), (row, column)


def _blocks(planes: NDArray[Any]) -> NDArray[Any]:
    """Blocks that are not constant, each flattened: shape (n, 64), evenly thinned."""
    count = (len(planes), planes.shape[1] // 8, planes.shape[2] // 8)
    cut = planes[:, : count[1] * 8, : count[2] * 8]
    folded = cut.reshape(count[0], count[1], 8, count[2], 8).transpose(0, 1, 3, 2, 4)
    chosen = np.arange(0, math.prod(count), -(-math.prod(count) // _MOST_BLOCKS) or 1)
    blocks = folded[np.unravel_index(chosen, count)].reshape(-1, 64)
    return blocks[(blocks != blocks[:, :1]).any(axis=1)]


def _fine_cosines() -> NDArray[np.float64]:
    """Orthonormal 8 x 8 cosine patterns of order u + v = 6 and 7, shape (64, 15)."""
    place = np.arange(8)
    line = np.cos(np.pi * (2 * place[None, :] + 1) * place[:, None] / 16) / 2
    line[0] /= np.sqrt(2)
    both = np.einsum("ux,vy->uvxy", line, line).reshape(8, 8, 64)
    order = np.add.outer(place, place)
    return both[(order == 6) | (order == 7)].T
