"""Penalty half of the splitting that shrinks wavelet coefficients of all frames together (l2,1)."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.recovery.frame import FrameWavelet
from mrics.recovery.joint_kernels import split_groups
from mrics.recovery.penalties import OrthonormalWavelet

Array = NDArray[Any]


class JointWavelet:
    """See :class:`places.JointPenalty`: one group for each coefficient, over the frames."""

    def __init__(self, single: FrameWavelet | OrthonormalWavelet, frames: int) -> None:
        self.single = single
        self.padded, self.symbol = single.padded, single.symbol
        self.state, self.coefficients = (
            np.empty((frames, *single.size), single.real) for _ in range(2)
        )
        self.sums = np.zeros(6)

    def set_weight(self, weight: float, images: list[Array]) -> None:
        """See :class:`places.JointPenalty`."""
        self.count = len(images)
        for frame, image in enumerate(images):
            self.single.analyse(image, self.state[frame])
        self.rho = self.single.balance(weight, self.state[: self.count])
        self.coefficients[...] = self.state
        self._move(0.0)

    def pull(self, images: list[Array]) -> None:
        """See :class:`places.JointPenalty`."""
        for frame, image in enumerate(images):
            self.single.synthesise(self.coefficients[frame], image)

    def push(self, images: list[Array], relax: float) -> Array:
        """See :class:`places.JointPenalty`."""
        for frame, image in enumerate(images):
            self.single.analyse(image, self.coefficients[frame])
        self._move(relax)
        return self.sums

    def _move(self, relax: float) -> None:
        split_groups(
            self.state[: self.count], self.coefficients[: self.count], self.single.bands,
            self.single.weights, self.rho, self.single.real.type(relax), self.sums,
        )  # fmt: skip
