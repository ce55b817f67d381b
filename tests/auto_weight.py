"""Chosen weights against the best ones on open volumes: the cases and their loss in dB."""

from __future__ import annotations

from functools import cache
from itertools import product
from typing import Any, NamedTuple

import nibabel
import numpy as np
from open_volumes import open_volume

from mrics.encoding import undersample
from mrics.quality import score
from mrics.recovery import recover
from mrics.sampling import draw_pattern
from mrics.scan import body_mask

#: axial slices of each volume, spread over the brain (E has two)
SLICES = {"A": (7, 11, 15), "C": (8, 12, 16), "E": (0, 1), "G": (35, 45, 55)}
PATTERNS = [(1, 2), (1, 3), (1, 4), (2, 2), (2, 4), (2, 6), (2, 8)]


class Case(NamedTuple):
    """One volume, noise level, pattern and method."""

    volume: str
    snr: float
    axes: int
    acceleration: float
    method: str


class Loss(NamedTuple):
    """PSNR in dB of the chosen and of the best weight, and the weights in units of sigma."""

    case: Case
    chosen: float
    best: float
    weight: float
    best_weight: float

    @property
    def loss(self) -> float:
        """What the choice costs."""
        return self.best - self.chosen


CASES = [
    Case(volume, snr, axes, acceleration, method)
    for volume, snr, (axes, acceleration), method in product(
        SLICES, (10.0, 30.0, 100.0), PATTERNS, ("wavelet", "variation")
    )
]


@cache
def planes(volume: str) -> tuple[Any, Any]:
    """Slices of the volume with a smooth phase multiplied in, and their body mask."""
    data = np.asanyarray(nibabel.load(open_volume(volume)).dataobj).astype(np.float32)
    while data.ndim > 3:
        data = data[..., 0]
    chosen = list(SLICES[volume])
    mask = np.moveaxis(body_mask(data), 2, 0)[chosen]
    stack = np.moveaxis(data, 2, 0)[chosen]
    y, x = np.mgrid[-1 : 1 : stack.shape[1] * 1j, -1 : 1 : stack.shape[2] * 1j]
    phase = np.exp(1j * (0.6 * x + 0.9 * x * y - 0.7 * y * y + 0.3 * x * x))
    return (stack * phase).astype(np.complex64), mask


def losses(case: Case, rules: tuple[str, ...] = ("auto",), slices: slice = slice(None)) -> Any:
    """A :class:`Loss` for every rule; both in-plane axes are phase and partition in 2-D."""
    stack, mask = (part[slices] for part in planes(case.volume))
    sigma = float(np.abs(stack)[mask].mean()) / case.snr
    rows = stack.shape[1]
    shape, exponent, centre = (stack.shape[1:], 3, 16)
    if case.axes == 1:
        shape, exponent, centre = (rows,), 2, max(8, round(0.08 * rows))
    seed = CASES.index(case)
    pattern = draw_pattern(
        shape,
        law="power",
        exponent=exponent,
        acceleration=case.acceleration,
        calibration=centre,
        seed=seed,
    )
    acquisition = undersample(stack, pattern, sigma=sigma, seed=seed)
    best = recover(acquisition, case.method, weight="best", reference=stack, mask=mask)
    reached = score(best.image, stack, mask)["psnr"]
    found = {}
    for rule in rules:
        one = recover(acquisition, case.method, weight=rule)
        psnr = score(one.image, stack, mask)["psnr"]
        found[rule] = Loss(
            case, psnr, reached, one.certificate.weight or 0.0, best.certificate.weight or 0.0
        )
    return found
