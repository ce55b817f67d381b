"""Weights chosen on training scans, then frozen for the scans that are studied."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np

from mrics.numerics import one_blas_thread
from mrics.recovery import recover, search_weight
from mrics.study.ledger import Ledger
from mrics.study.plan import PlanRow, StudyPlan
from mrics.study.prepare import Prepared
from mrics.study.units import Unit, acquire, content_key


def trained_rows(
    plan: StudyPlan, rows: Sequence[PlanRow], folder: Path, ledger: Ledger
) -> list[PlanRow]:
    """The rows, with a number where ``weight = "trained"`` stood.

    The weight is the one with the best mean PSNR over the training scans, each undersampled by the
    first draw of the arm with the study's noise. What was trained once is kept in the ledger.
    """
    return [
        _trained(plan, row, folder, ledger)
        if row.arm.recovery_settings.get("weight") == "trained"
        else row
        for row in rows
    ]


def _trained(plan: StudyPlan, row: PlanRow, folder: Path, ledger: Ledger) -> PlanRow:
    own = plan.on_training_scans()
    scans = [own.prepared(number) for number in range(len(own.scans))]
    units = own.units(folder, [scan.scan.sha256 for scan in scans], [row], 1)
    key = content_key(trained=[unit.key for unit in units])
    kept = ledger.finished([key]).get(key)
    if kept is None:
        with one_blas_thread():
            errors = [_error(unit, scan) for unit, scan in zip(units, scans, strict=True)]
            weight, trials = search_weight(lambda w: sum(error(w) for error in errors))
        kept = {"weight": weight, "trials": trials}
        ledger.commit(key, kept)
    arm = replace(
        row.arm,
        recovery_settings={**row.arm.recovery_settings, "weight": kept["weight"]},
        weight_rule=f"trained: on {', '.join(own.scan_ids)}, {kept['trials']} trials",
    )
    return replace(row, arm=arm)


def _error(unit: Unit, scan: Prepared) -> Callable[[float], float]:
    """Logarithm of the squared error of the magnitude in the body: its sum ranks mean PSNR."""
    _, acquisition = acquire(unit, scan)
    wanted = np.abs(scan.stack[scan.body])

    def error(weight: float) -> float:
        settings = {**unit.arm.recovery_settings, "weight": weight}
        image = recover(acquisition, unit.arm.recovery, **settings).image
        difference = np.abs(image[scan.body]) - wanted
        return float(np.log(max(np.vdot(difference, difference), 1e-300)))

    return error
