"""Over-relaxed alternating directions with a closed-form data half, and its duality gap.

For 1/2 ||A x - d||^2 + sum_b w_b ||K_b x||_1 with scaled dual variables (Eckstein & Bertsekas 1992;
Boyd et al. 2011) the penalty half holds one state v per coefficient: z = shrink(v), h = 2 z - v.

    x = argmin 1/2 ||A x - d||^2 + rho/2 ||K x - h||^2,      v <- v + relax (K x - z)

The data half is a division in k-space (:meth:`PlaneModel.solve`). Its optimality condition makes
q = rho (K x - h) and the residual p = A x - d satisfy A^H p + K^H q = 0, so that s p and s q with
s = min(1, min_b w_b / max |q_b|) are feasible for the dual, and in every iteration

    F(x) - F* <= F(x) + s^2/2 ||p||^2 + s Re<p, d>

is known without further transforms. Plain wavelets with one channel hand back z instead of x
(K^H K is 1, so that z are coefficients of an image): its misfit follows from the spectrum of the
state (:meth:`PlaneModel.solve_both`), and F(z) is set against the dual value of the iteration
before, or of the last one. Where that condition holds only up to a remainder e (bands
without penalty, several channels) s B ||e|| is added, which bounds the distance to every optimum
in a ball of radius B, twice the norm found.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from mrics.recovery.penalties import OrthonormalWavelet
from mrics.recovery.plane import PlaneModel

Array = NDArray[Any]
RELAX = 1.8


class Penalty(Protocol):
    """The penalty half: weights set, state and rho h kept by the object."""

    symbol: Array
    padded: tuple[int, int]

    def set_weight(self, weight: float, image: Array) -> None:
        """Thresholds for ``weight`` and rho from the size of K image; the state becomes K image."""

    def pull(self, image: Array) -> None:
        """Fill ``image`` (float view) with rho K^H h."""

    def push(self, image: Array, relax: float) -> Array:
        """Move the state to x = ``image`` (which stays); sums as in ``split_bands``."""


@dataclass(frozen=True)
class PlaneResult:
    """What one plane's solver hands back."""

    iterations: int = 0
    change: float = 0.0
    objective: float = 0.0
    optimality: float = 0.0
    history: dict[str, list[float]] = field(default_factory=dict)

    def scaled(self, unit: float) -> PlaneResult:
        """The same with objectives in the data's unit, the data having been divided by ``unit``."""
        history = dict(self.history)
        if "objective" in history:
            history["objective"] = [value * unit**2 for value in history["objective"]]
        return replace(self, objective=self.objective * unit**2, history=history)


class Trace:
    """Objective, duality gap and change of a running splitting, and their history."""

    def __init__(self) -> None:
        self.done = 0
        self.objective = self.gap = self.change = np.inf
        self.dual = -np.inf
        self.history: dict[str, list[float]] = {"objective": [], "optimality": [], "change": []}

    def add(self, terms: Any, sums: Array, *images: Array) -> None:
        """One iteration: ``terms`` of :meth:`PlaneModel.solve`, ``sums`` of the penalty."""
        self.bound(terms, sums, *images)
        self.measure(0.5 * float(terms[0]) + float(sums[0]))
        self.end()

    def bound(self, terms: Any, sums: Array, *images: Array) -> None:
        """Take up the dual value of this iteration; note the change."""
        _, p_square, product, slack = (float(term) for term in terms)
        norm = float(np.sqrt(sum(np.vdot(image, image).real for image in images)))
        s = 1 / max(1.0, float(sums[1]))
        dual = -0.5 * s * s * p_square - s * product
        dual -= 2 * s * (slack * norm + float(np.sqrt(sums[2] * sums[3])))
        self.dual = dual  # not the largest so far: the ball of an early small image is too small
        self.change = float(np.sqrt(sums[4] / max(sums[5], 1e-300)))

    def measure(self, objective: float) -> None:
        """Take up the objective of the image at hand."""
        self.objective = objective
        self.gap = (objective - self.dual) / max(objective, 1e-300)

    def end(self) -> None:
        """Close an iteration."""
        self.done += 1
        for name, value in (
            ("objective", self.objective),
            ("optimality", self.gap),
            ("change", self.change),
        ):
            self.history[name].append(value)

    def result(self) -> PlaneResult:
        """What is handed back."""
        return PlaneResult(self.done, self.change, self.objective, self.gap, self.history)


class Splitting:
    """Solver of one plane with its memory."""

    def __init__(self, model: PlaneModel, penalty: Penalty) -> None:
        self.model, self.penalty = model, penalty

    def run(self, weight: float, iterations: int, tolerance: float) -> PlaneResult:
        """Minimise for the plane loaded in the model, whose image is the result."""
        model, penalty = self.model, self.penalty
        model.start()
        penalty.set_weight(weight, model.flat)
        model.couple(penalty.symbol)
        if model.maps is None and isinstance(penalty, OrthonormalWavelet):
            return self._run_shrunk(penalty, iterations, tolerance)
        trace = Trace()
        while trace.done < iterations and trace.gap > tolerance:
            penalty.pull(model.flat)
            terms = model.solve(penalty.symbol, RELAX)
            trace.add(terms, penalty.push(model.flat, RELAX), model.image)
        return trace.result()

    def _run_shrunk(
        self, penalty: OrthonormalWavelet, iterations: int, tolerance: float
    ) -> PlaneResult:
        """The same with z for the image.

        Its objective comes within a given distance of the optimum in half as many iterations as
        that of x, and it is known before the state moves on: the iteration that finds it low
        enough ends there.
        """
        model = self.model
        model.follow()
        trace = Trace()
        while trace.done < iterations and trace.gap > tolerance:
            penalty.pull(model.flat)
            terms, misfit = model.solve_both(penalty.symbol, RELAX)
            trace.measure(0.5 * misfit + penalty.shrunk_norm)
            last = trace.done + 1 == iterations
            if last or trace.gap > tolerance:
                trace.bound(terms, penalty.push(model.flat, 0.0 if last else RELAX), model.image)
            if last:
                trace.measure(trace.objective)
            trace.end()
        penalty.shrunk(model.flat)
        return trace.result()
