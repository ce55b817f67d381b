"""Chosen weights against the best on open volumes, in full; the default suite runs a tenth.

Run with ``pytest -n 0 -s``: every case is printed.
"""

import numpy as np
import pytest
from auto_weight import CASES, losses


@pytest.mark.slow
def test_auto_is_close_to_best() -> None:
    found = []
    for case in CASES:
        one = losses(case)["auto"]
        found.append(one)
        print(
            f"{case.volume} SNR {case.snr:3.0f} {case.axes}-D R {case.acceleration:g} "
            f"{case.method:9} auto {one.chosen:.2f} dB at {one.weight:.3g}, "
            f"best {one.best:.2f} dB at {one.best_weight:.3g}, loss {one.loss:.2f} dB",
            flush=True,
        )
    lost = np.array([one.loss for one in found])
    for name in ("wavelet", "variation"):
        for axes in (1, 2):
            part = lost[[c.method == name and c.axes == axes for c in CASES]]
            print(
                f"{name} {axes}-D: median {np.median(part):.3f} dB, "
                f"95 % {np.quantile(part, 0.95):.2f} dB, worst {part.max():.2f} dB"
            )
    worst = max(found, key=lambda one: one.loss)
    print(f"all: median {np.median(lost):.3f}, 95 % {np.quantile(lost, 0.95):.2f}, {worst}")
    assert np.median(lost) <= 0.2
    assert np.quantile(lost, 0.95) <= 0.5


@pytest.mark.slow
def test_auto_is_the_rule_that_loses_least() -> None:
    rules = ("auto", "held-out", "sure", "discrepancy")
    found = [losses(case, rules) for case in CASES[1::4]]
    ends = {}
    for rule in rules:
        lost = np.array([one[rule].loss for one in found])
        ends[rule] = np.quantile(lost, 0.95)
        print(
            f"{rule:11} {len(lost)} cases: median {np.median(lost):.3f} dB, "
            f"95 % {ends[rule]:.2f} dB, worst {lost.max():.2f} dB"
        )
    assert min(ends, key=ends.__getitem__) == "auto"
