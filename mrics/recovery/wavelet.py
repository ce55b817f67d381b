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

With ``scales`` the weight of a level is multiplied by its factor. With ``joint`` |c_k| is the root
of the sum of squares over the frames of a place (l2,1 norm), so that frames keep their edges in
common; the data term is summed over them.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import Encoding, frames_of
from mrics.encoding.acquisition import Acquisition
from mrics.numerics import stream
from mrics.numerics.wavelets import PlaneWavelet
from mrics.recovery import kernels
from mrics.recovery.contract import Certificate, Recovered
from mrics.recovery.convex import ITERATIONS, certify, joined, phase_note, run_planes
from mrics.recovery.frame import FrameWavelet
from mrics.recovery.joint import JointWavelet
from mrics.recovery.joint_kernels import shrink_groups
from mrics.recovery.penalties import OrthonormalWavelet, bands_of, levels_for, padded_shape
from mrics.recovery.places import JointPenalty, by_frame, by_place, run_places
from mrics.recovery.plane import PlaneModel, each_plane, phase_centre, scale_unit
from mrics.recovery.settings import Wavelet
from mrics.recovery.splitting import PlaneResult

Array = NDArray[Any]
#: iterations of the shifting variant, and over how many its change is averaged
_SHIFTING = 60
_LAST = 8


def solve(acquisition: Acquisition, settings: Wavelet, sigma: float) -> Recovered:
    """Recover every plane; see the module for the objectives."""
    weight = float(settings.weight)
    if settings.shift == "random":
        return _shifting(acquisition, settings, weight, weight * sigma)
    levels = settings.levels or levels_for(acquisition.shape[1:])
    full = settings.shift == "full"
    kind = FrameWavelet if full else OrthonormalWavelet

    def make(grid: tuple[int, int], real: Any) -> FrameWavelet | OrthonormalWavelet:
        return kind(grid, real, settings.wavelet, levels, settings.scales)

    def make_joint(grid: tuple[int, int], real: Any, frames: int) -> JointPenalty:
        return JointWavelet(make(grid, real), frames)

    limits: tuple[Any, ...] = (
        weight * sigma,
        settings.iterations or ITERATIONS,
        settings.tolerance,
        not full,
        settings.phase,
    )
    if settings.joint and frames_of(acquisition) > 1:
        image, results = run_places(acquisition, make_joint, *limits)
    else:
        image, results = run_planes(acquisition, make, *limits)
    note = joined("full cycle spinning" if full else "", phase_note(settings.phase))
    return certify("wavelet", image, results, settings.tolerance, weight, note)


def _shifting(
    acquisition: Acquisition, settings: Wavelet, weight: float, threshold: float
) -> Recovered:
    dtype = acquisition.kspace.dtype
    unit = scale_unit(acquisition)
    image = np.zeros(acquisition.shape, dtype)
    iterations = settings.iterations or _SHIFTING
    grid = acquisition.shape[1:]
    together = frames_of(acquisition) if settings.joint else 1
    placed = by_place(acquisition) if together > 1 else acquisition
    centre = phase_centre(acquisition, settings.phase)

    def make() -> ShiftingPlanes:
        return ShiftingPlanes((acquisition.channels, *grid), dtype, settings, together, centre)

    def one(
        worker: ShiftingPlanes, encoding: Encoding, data: Array, i: int, plane: int
    ) -> PlaneResult:
        models = worker.models
        active = [f for f in range(together) if models[f].load(encoding, data, i + f, unit)]
        if not active:
            return PlaneResult()
        result = worker.run(active, threshold / unit, iterations, plane // together)
        for f in active:
            models[f].write(models[f].image, unit, image[plane + f])
        return result

    results = each_plane(placed, make, one, together)
    certificate = Certificate(
        "wavelet",
        iterations=max(r.iterations for r in results),
        final_change=max(r.change for r in results),
        certified=False,
        weight=weight,
        weight_rule="given",
        note=joined(
            f"not certified: shifting objective; change is the mean of the last {_LAST}",
            phase_note(settings.phase),
        ),
    )
    return Recovered(by_frame(image, together), certificate, results[0].history)


class ShiftingPlanes:
    """Accelerated proximal gradient with restart, shifted in every iteration.

    One plane, or the planes of all frames at a place that are shrunk together. Beck & Teboulle
    2009; restart by the sign of <y - x, x - x_last>, O'Donoghue & Candes 2015.
    """

    def __init__(
        self,
        shape: tuple[int, int, int],
        dtype: Any,
        settings: Wavelet,
        frames: int,
        centre: tuple[int, int] | None,
    ) -> None:
        levels = settings.levels or levels_for(shape[1:])
        padded = padded_shape(shape[1:], levels)
        self.models = [PlaneModel(shape, dtype, padded, centre) for _ in range(frames)]
        self.real = self.models[0].real
        self.wavelet = PlaneWavelet(padded, settings.wavelet, levels, dtype)
        self.bands = bands_of(padded, levels)
        self.factors = np.repeat(settings.scales or [1.0] * levels, 3)
        self.seed = settings.seed
        size = (frames, padded[0], 2 * padded[1])
        self.point, self.last, self.coefficients = (np.empty(size, self.real) for _ in range(3))
        self.moved = np.empty(size[1:], self.real)

    def run(self, active: list[int], threshold: float, iterations: int, place: int) -> PlaneResult:
        """Iterate from A^H d; the images are left in the models ``active``."""
        models, real = [self.models[f] for f in active], self.real.type
        bound = max(model.bound for model in models)
        thresholds = np.zeros(len(self.bands), self.real)
        thresholds[:-1] = threshold / bound * self.factors
        step = real(1 / bound)
        period = 2**self.wavelet.levels
        moves = stream(self.seed, "shifts", place).integers(0, period, (iterations, 2))
        for f, model in enumerate(models):
            model.image[...] = 0
            model.gradient()
            np.multiply(model.flat, -step, out=self.point[f])
        self.last[...] = self.point
        coefficients = self.coefficients[: len(models)]
        sums, total = np.zeros(3), np.zeros(3)
        changes: list[float] = []
        theta, momentum = 1.0, 0.0
        for down, right in moves:
            for f, model in enumerate(models):
                model.flat[...] = self.point[f]
                model.gradient()
                kernels.shifted_step(self.point[f], model.flat, step, down, right, self.moved)
                self.wavelet.analyse(self.moved, coefficients[f])
            if len(models) == 1:
                kernels.shrink(coefficients[0], self.bands, thresholds)
            else:
                shrink_groups(coefficients, self.bands, thresholds)
            total[:] = 0
            for f in range(len(models)):
                self.wavelet.synthesise(coefficients[f], self.moved)
                kernels.shifted_momentum(
                    self.moved, down, right, real(momentum), self.last[f], self.point[f], sums
                )
                total += sums
            changes.append(float(np.sqrt(total[0] / max(total[1], 1e-300))))
            if total[2] > 0:
                theta = 1.0
            following = (1 + np.sqrt(1 + 4 * theta * theta)) / 2
            momentum = (theta - 1) / following
            theta = following
        for f, model in enumerate(models):
            model.flat[...] = self.last[f]
        return PlaneResult(
            iterations, float(np.mean(changes[-_LAST:])), history={"change": changes}
        )
