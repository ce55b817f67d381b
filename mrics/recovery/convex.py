"""Running a certified penalty over an acquisition, plane by plane, and its certificate."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import Encoding
from mrics.encoding.acquisition import Acquisition
from mrics.recovery.contract import Certificate, Recovered
from mrics.recovery.plane import PlaneModel, each_plane, phase_centre, scale_unit
from mrics.recovery.splitting import Penalty, PlaneResult, Splitting

Array = NDArray[Any]
#: iterations allowed where the settings name none
ITERATIONS = 500
MakePenalty = Callable[[tuple[int, int], Any], Penalty]


def run_planes(
    acquisition: Acquisition,
    make: MakePenalty,
    threshold: float,
    iterations: int,
    tolerance: float,
    hybrid: bool = False,
    phase: str = "free",
) -> tuple[Array, list[PlaneResult]]:
    """Minimise for every plane with the weight ``threshold`` in the data's unit.

    Parameters
    ----------
    make : callable
        (u, v) and real dtype to a penalty.
    hybrid : bool
        The penalty's symbol is a number, so that a full readout needs no transform.
    phase : {"free", "smooth"}
        See :func:`plane.phase_centre`.
    """
    centre = phase_centre(acquisition, phase)
    dtype = acquisition.kspace.dtype
    unit = scale_unit(acquisition)
    grid = acquisition.shape[1:]
    image = np.zeros(acquisition.shape, dtype)

    def make_worker() -> Splitting:
        penalty = make(grid, dtype.type(0).real.dtype)
        model = PlaneModel((acquisition.channels, *grid), dtype, penalty.padded, centre)
        return Splitting(model, penalty)

    def one(worker: Splitting, encoding: Encoding, data: Array, i: int, plane: int) -> PlaneResult:
        if not worker.model.load(encoding, data, i, unit, hybrid):
            return PlaneResult()
        result = worker.run(threshold / unit, iterations, tolerance)
        worker.model.write(worker.model.image, unit, image[plane])
        return result.scaled(unit)

    return image, each_plane(acquisition, make_worker, one)


def phase_note(phase: str) -> str:
    """What a certificate says of the setting ``phase``."""
    return "" if phase == "free" else "real image times the phase of the calibration region"


def joined(*notes: str) -> str:
    """Notes that are not empty, in one line."""
    return "; ".join(note for note in notes if note)


def certify(
    method: str,
    image: Array,
    results: list[PlaneResult],
    tolerance: float,
    weight: float,
    note: str = "",
) -> Recovered:
    """The certificate of the worst plane, objectives summed."""
    optimality = float(np.max([r.optimality for r in results]))  # a NaN stays one
    certificate = Certificate(
        method,
        iterations=max(r.iterations for r in results),
        final_change=max(r.change for r in results),
        objective=sum(r.objective for r in results),
        optimality=optimality,
        tolerance=tolerance,
        reached=optimality <= tolerance,
        weight=weight,
        weight_rule="given",
        note=note,
    )
    worst = max(results, key=lambda r: r.optimality)
    return Recovered(image, certificate, worst.history)
