"""Chosen weights against the best on open volumes: a fixed tenth of the cases, one slice each."""

import numpy as np
from auto_weight import CASES, losses


def test_auto_is_close_to_best() -> None:
    found = [losses(case, slices=slice(1, 2))["auto"] for case in CASES[3::10]]
    lost = np.array([one.loss for one in found])
    worst = max(found, key=lambda one: one.loss)
    assert np.median(lost) <= 0.2, worst
    assert np.quantile(lost, 0.95) <= 0.5, worst
