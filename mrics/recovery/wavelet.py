"""L1 of orthonormal wavelet coefficients by accelerated proximal gradient with restart.

With W the periodized orthonormal transform of the plane padded to a multiple of 2^levels and P the
crop to the plane, the unknowns are the coefficients c of the padded plane (synthesis form):

    minimise  1/2 ||M F S P W^H c - d||^2 + sum_b t_b sum_{k in band b} |c_k|,   x = P W^H c

Complex coefficients are shrunk by modulus; the coarsest approximation is not shrunk (t_b = 0).
Where the plane needs no padding this equals the analysis form. Method: Beck & Teboulle 2009 with
the restart of O'Donoghue & Candes 2015.

Duality gap. With r the residual at c, g = W P^H A^H r and s = min(1, min_b t_b / max|g_b|), the
scaled residual is a feasible dual point up to the unpenalised band, so that

    F(c) - F* <= F(c) + s^2/2 ||r||^2 + s Re<r, d> + s B ||g_free||

for every optimum whose unpenalised coefficients have norm at most B; B is twice their norm at c.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import Encoding
from mrics.encoding.acquisition import Acquisition
from mrics.numerics import stream
from mrics.numerics.wavelets import PlaneWavelet
from mrics.recovery import kernels
from mrics.recovery.contract import Certificate, Recovered
from mrics.recovery.plane import PlaneModel, each_plane, scale_unit
from mrics.recovery.settings import Wavelet

Array = NDArray[Any]
_LEAST_COARSE = 5
_MOST_LEVELS = 4
#: iterations over which the shifting variant's change is averaged
_LAST = 8


@dataclass(frozen=True)
class PlaneResult:
    """What one plane's solver hands back."""

    iterations: int
    change: float
    objective: float
    optimality: float
    history: dict[str, list[float]]


def levels_for(shape: tuple[int, int]) -> int:
    """Levels that leave at least 5 samples along the shorter axis, between 1 and 4."""
    return int(np.clip(np.floor(np.log2(min(shape) / _LEAST_COARSE)), 1, _MOST_LEVELS))


def padded_shape(shape: tuple[int, int], levels: int) -> tuple[int, int]:
    """Smallest plane of multiples of 2^levels that holds ``shape``."""
    step = 2**levels
    return (-(-shape[0] // step) * step, -(-shape[1] // step) * step)


def bands_of(shape: tuple[int, int], levels: int) -> NDArray[np.int64]:
    """Row and column ranges of the packed bands, finest first, the approximation last."""
    rows = []
    a, b = shape
    for _ in range(levels):
        a, b = a // 2, b // 2
        rows += [(0, a, b, 2 * b), (a, 2 * a, 0, b), (a, 2 * a, b, 2 * b)]
    return np.array([*rows, (0, a, 0, b)], dtype=np.int64)


class WaveletPlane:
    """Solver of one plane with its memory."""

    def __init__(
        self, shape: tuple[int, int, int], dtype: Any, settings: Wavelet, unit: float
    ) -> None:
        grid = shape[1:]
        self.settings, self.unit = settings, unit
        levels = settings.levels or levels_for(grid)
        padded = padded_shape(grid, levels)
        self.model = PlaneModel(shape, dtype, padded)
        self.real = self.model.real
        self.wavelet = PlaneWavelet(padded, settings.wavelet, levels, dtype)
        self.bands = bands_of(padded, levels)
        width = (padded[0], 2 * padded[1])
        self.point, self.gradient, self.current = (np.empty(width, self.real) for _ in range(3))
        self.image = self.model.image.view(self.real)
        self.sums = np.zeros(7)

    def start(self) -> None:
        """Coefficients of A^H d as first iterate."""
        self.image[...] = 0
        self.model.gradient()
        self.wavelet.analyse(self.image, self.current)
        np.negative(self.current, out=self.current)
        self.current /= self.real.type(self.model.bound)

    def run(self, weight: float, iterations: int, tolerance: float) -> PlaneResult:
        """Minimise for thresholds ``weight`` from :attr:`current`; leaves it at the optimum."""
        thresholds = np.full(len(self.bands), weight, self.real)
        thresholds[-1] = 0
        step = self.real.type(1 / self.model.bound)
        history: dict[str, list[float]] = {"objective": [], "optimality": [], "change": []}
        self.point[...] = self.current
        theta, momentum = 1.0, 0.0
        gap = change = objective = np.inf
        done = 0
        while done < iterations:
            done += 1
            self.wavelet.synthesise(self.point, self.image)
            square, product = self.model.gradient()
            self.wavelet.analyse(self.image, self.gradient)
            kernels.shrink_step(
                self.point, self.gradient, self.current, self.bands, thresholds, step,
                self.real.type(momentum), self.sums,
            )  # fmt: skip
            objective, gap = _gap(square, product, self.sums)
            change = float(np.sqrt(self.sums[5] / max(self.sums[6], 1e-300)))
            history["objective"].append(objective * self.unit**2)
            history["optimality"].append(gap)
            history["change"].append(change)
            if gap <= tolerance:
                break
            if self.sums[4] > 0:
                theta = 1.0
            following = (1 + np.sqrt(1 + 4 * theta * theta)) / 2
            momentum = (theta - 1) / following
            theta = following
        return PlaneResult(done, change, objective * self.unit**2, gap, history)

    def run_shifting(self, weight: float, iterations: int, seed: int, plane: int) -> PlaneResult:
        """Proximal gradient with momentum, the transform shifted at random in every iteration.

        Iterates are images of the padded plane here; :attr:`current` is left as coefficients.
        """
        thresholds = np.full(len(self.bands), weight / self.model.bound, self.real)
        thresholds[-1] = 0
        step = self.real.type(1 / self.model.bound)
        moves = stream(seed, "shifts", plane).integers(0, 2**self.wavelet.levels, (iterations, 2))
        moved = np.empty_like(self.point)
        self.wavelet.synthesise(self.current, self.point)
        last = self.point.copy()
        sums = np.zeros(3)
        changes: list[float] = []
        theta, momentum = 1.0, 0.0
        for down, right in moves:
            self.image[...] = self.point
            self.model.gradient()
            kernels.shifted_step(self.point, self.image, step, down, right, moved)
            self.wavelet.analyse(moved, self.gradient)
            kernels.shrink(self.gradient, self.bands, thresholds)
            self.wavelet.synthesise(self.gradient, moved)
            kernels.shifted_momentum(
                moved, down, right, self.real.type(momentum), last, self.point, sums
            )
            changes.append(float(np.sqrt(sums[0] / max(sums[1], 1e-300))))
            if sums[2] > 0:
                theta = 1.0
            following = (1 + np.sqrt(1 + 4 * theta * theta)) / 2
            momentum = (theta - 1) / following
            theta = following
        self.wavelet.analyse(last, self.current)
        mean = float(np.mean(changes[-_LAST:]))
        return PlaneResult(iterations, mean, 0.0, np.inf, {"change": changes})

    def write(self, out: Array) -> None:
        """Image of :attr:`current` into ``out`` of shape (u, v), in the data's unit."""
        self.wavelet.synthesise(self.current, self.image)
        np.multiply(
            self.model.image[: self.model.u, : self.model.v], self.real.type(self.unit), out=out
        )


def _gap(square: float, product: float, sums: Array) -> tuple[float, float]:
    """Objective and relative duality gap (see the module's formula)."""
    one_norm, excess, free_gradient, free_point = sums[:4]
    objective = 0.5 * square + one_norm
    s = 1.0 if excess <= 1 else 1.0 / excess
    dual = -0.5 * s * s * square - s * product
    dual -= s * 2 * np.sqrt(free_gradient * free_point)
    return float(objective), float((objective - dual) / max(objective, 1e-300))


def solve(acquisition: Acquisition, settings: Wavelet, sigma: float) -> Recovered:
    """Recover every plane; see the module for the objective and the certificate."""
    dtype = acquisition.kspace.dtype
    unit = scale_unit(acquisition)
    image = np.zeros(acquisition.shape, dtype)
    shifting = settings.shift == "random"
    iterations = settings.iterations or (60 if shifting else 300)
    weight, rule = settings.weight, "given"
    if isinstance(weight, str):
        weight = 0.4 if shifting else 1.0
        rule = f"auto: {weight:g} sigma"
    threshold = weight * sigma / unit
    shape = (acquisition.channels, *acquisition.shape[1:])

    def make() -> WaveletPlane:
        return WaveletPlane(shape, dtype, settings, unit)

    def one(
        worker: WaveletPlane, encoding: Encoding, data: Array, i: int, plane: int
    ) -> PlaneResult | None:
        if not worker.model.load(encoding, data, i, unit):
            return None
        worker.start()
        if shifting:
            result = worker.run_shifting(threshold, iterations, settings.seed, plane)
        else:
            result = worker.run(threshold, iterations, settings.tolerance)
        worker.write(image[plane])
        return result

    results = [r for r in each_plane(acquisition, make, one) if r is not None]
    common: dict[str, Any] = {
        "iterations": max((r.iterations for r in results), default=0),
        "final_change": max((r.change for r in results), default=0.0),
        "weight": weight,
        "weight_rule": rule,
    }
    if shifting:
        note = f"not certified: shifting objective; change is the mean of the last {_LAST}"
        certificate = Certificate("wavelet", certified=False, reached=True, note=note, **common)
    else:
        optimality = max((r.optimality for r in results), default=0.0)
        certificate = Certificate(
            "wavelet",
            objective=sum(r.objective for r in results),
            optimality=optimality,
            tolerance=settings.tolerance,
            reached=optimality <= settings.tolerance,
            **common,
        )
    history = results[0].history if results else {}
    return Recovered(image, certificate, history)
