"""L1 of wavelet coefficients.

Plain (``shift="none"``), certified. With W the periodized orthonormal transform of the plane padded
to a multiple of 2^levels and P the crop to the plane, the unknowns are the coefficients c of the
padded plane (synthesis form):

    minimise  1/2 ||M F S P W^H c - d||^2 + weight sigma sum_{k not coarsest} |c_k|,   x = P W^H c

Complex coefficients are shrunk by modulus; the coarsest approximation is not shrunk. Where the
plane needs no padding this equals the analysis form.

Full cycle spinning (``shift="full"``), certified: the penalty is the mean of the plain one over all
shifts of the plane (Coifman & Donoho 1995), which is the weighted L1 norm of the undecimated
bands (see ``frame``); the unknown is the image itself, on planes of any size.

Random shifts (``shift="random"``): the transform is moved by a random shift in every iteration
(cycle spinning spread over the iterations). There is no
fixed objective, so it is not certified.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import Encoding
from mrics.encoding.acquisition import Acquisition
from mrics.numerics import stream
from mrics.numerics.wavelets import PlaneWavelet
from mrics.recovery import kernels
from mrics.recovery.contract import Certificate, Recovered
from mrics.recovery.convex import ITERATIONS, certify, run_planes
from mrics.recovery.frame import FrameWavelet
from mrics.recovery.penalties import OrthonormalWavelet, bands_of, levels_for, padded_shape
from mrics.recovery.plane import PlaneModel, each_plane, scale_unit
from mrics.recovery.settings import Wavelet
from mrics.recovery.splitting import Penalty, PlaneResult

Array = NDArray[Any]
#: iterations of the shifting variant, and over how many its change is averaged
_SHIFTING = 60
_LAST = 8


def solve(acquisition: Acquisition, settings: Wavelet, sigma: float) -> Recovered:
    """Recover every plane; see the module for the objectives."""
    weight, rule = settings.weight, "given"
    if isinstance(weight, str):
        weight = 0.4 if settings.shift == "random" else 1.0
        rule = f"auto: {weight:g} sigma"
    if settings.shift == "random":
        return _shifting(acquisition, settings, weight, rule, weight * sigma)
    levels = settings.levels or levels_for(acquisition.shape[1:])
    full = settings.shift == "full"
    kind = FrameWavelet if full else OrthonormalWavelet

    def make(grid: tuple[int, int], real: Any) -> Penalty:
        return kind(grid, real, settings.wavelet, levels)

    image, results = run_planes(
        acquisition,
        make,
        weight * sigma,
        settings.iterations or ITERATIONS,
        settings.tolerance,
        hybrid=not full,
    )
    note = "full cycle spinning" if full else ""
    return certify("wavelet", image, results, settings.tolerance, weight, rule, note)


def _shifting(
    acquisition: Acquisition, settings: Wavelet, weight: float, rule: str, threshold: float
) -> Recovered:
    dtype = acquisition.kspace.dtype
    unit = scale_unit(acquisition)
    image = np.zeros(acquisition.shape, dtype)
    iterations = settings.iterations or _SHIFTING
    grid = acquisition.shape[1:]

    def make() -> ShiftingPlane:
        return ShiftingPlane((acquisition.channels, *grid), dtype, settings)

    def one(
        worker: ShiftingPlane, encoding: Encoding, data: Array, i: int, plane: int
    ) -> PlaneResult:
        if not worker.model.load(encoding, data, i, unit):
            return PlaneResult()
        result = worker.run(threshold / unit, iterations, plane)
        np.multiply(worker.model.inner, worker.model.real.type(unit), out=image[plane])
        return result

    results = each_plane(acquisition, make, one)
    certificate = Certificate(
        "wavelet",
        iterations=max(r.iterations for r in results),
        final_change=max(r.change for r in results),
        certified=False,
        weight=weight,
        weight_rule=rule,
        note=f"not certified: shifting objective; change is the mean of the last {_LAST}",
    )
    return Recovered(image, certificate, results[0].history)


class ShiftingPlane:
    """Accelerated proximal gradient of one plane with restart, shifted in every iteration.

    Beck & Teboulle 2009; restart by the sign of <y - x, x - x_last>, O'Donoghue & Candes 2015.
    """

    def __init__(self, shape: tuple[int, int, int], dtype: Any, settings: Wavelet) -> None:
        levels = settings.levels or levels_for(shape[1:])
        padded = padded_shape(shape[1:], levels)
        self.model = PlaneModel(shape, dtype, padded)
        self.real = self.model.real
        self.wavelet = PlaneWavelet(padded, settings.wavelet, levels, dtype)
        self.bands = bands_of(padded, levels)
        self.seed = settings.seed
        size = (padded[0], 2 * padded[1])
        self.point, self.last, self.moved, self.coefficients = (
            np.empty(size, self.real) for _ in range(4)
        )

    def run(self, threshold: float, iterations: int, plane: int) -> PlaneResult:
        """Iterate from A^H d; the image is left in the model."""
        model, real = self.model, self.real.type
        thresholds = np.full(len(self.bands), threshold / model.bound, self.real)
        thresholds[-1] = 0
        step = real(1 / model.bound)
        period = 2**self.wavelet.levels
        moves = stream(self.seed, "shifts", plane).integers(0, period, (iterations, 2))
        model.image[...] = 0
        model.gradient()
        np.multiply(model.flat, -step, out=self.point)
        self.last[...] = self.point
        sums = np.zeros(3)
        changes: list[float] = []
        theta, momentum = 1.0, 0.0
        for down, right in moves:
            model.flat[...] = self.point
            model.gradient()
            kernels.shifted_step(self.point, model.flat, step, down, right, self.moved)
            self.wavelet.analyse(self.moved, self.coefficients)
            kernels.shrink(self.coefficients, self.bands, thresholds)
            self.wavelet.synthesise(self.coefficients, self.moved)
            kernels.shifted_momentum(
                self.moved, down, right, real(momentum), self.last, self.point, sums
            )
            changes.append(float(np.sqrt(sums[0] / max(sums[1], 1e-300))))
            if sums[2] > 0:
                theta = 1.0
            following = (1 + np.sqrt(1 + 4 * theta * theta)) / 2
            momentum = (theta - 1) / following
            theta = following
        model.flat[...] = self.last
        return PlaneResult(
            iterations, float(np.mean(changes[-_LAST:])), history={"change": changes}
        )
