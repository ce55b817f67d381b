"""Findings on scans of known history: none on clean ones, the right one on manipulated ones.

A tenth of the campaign ``tests/campaigns/test_fitness_campaign.py``, on the shipped sample scans.
"""

from __future__ import annotations

import numpy as np
import pytest
from scan_manipulations import CASES, Case, as_scan, axes_of, manipulated, noisy, sample

from mrics.scan import inspect_scan

NAMES = ("sub-a_acq-gre3d", "sub-c_acq-tse2d")


@pytest.mark.parametrize("magnitude", [False, True], ids=["complex", "magnitude"])
@pytest.mark.parametrize("seed", range(10))
def test_clean_scans_have_no_finding(seed: int, magnitude: bool) -> None:
    name = NAMES[seed % 2]
    x = noisy(sample(name, 14), 0.7 * seed, seed)  # SNR about 30 down to 13
    found = inspect_scan(as_scan(np.abs(x) if magnitude else x), axes_of(name))
    assert [f.code for f in found] == (["magnitude-only"] if magnitude else [])


RUNS = [
    (number, case, magnitude)
    for number, case in enumerate(CASES)
    for magnitude in (False, True)
    if not (magnitude and case.complex_only)
]


@pytest.mark.parametrize(
    ("number", "case", "magnitude"),
    RUNS,
    ids=[f"{c.name}, {'magnitude' if m else 'complex'}" for _, c, m in RUNS],
)
def test_manipulated_scans_are_found(number: int, case: Case, magnitude: bool) -> None:
    name = NAMES[(number + magnitude) % 2]
    clean = noisy(sample(name, 14), 2.0, number)
    found = inspect_scan(as_scan(manipulated(case, clean, magnitude)), axes_of(name))
    assert {f.code for f in found} & set(case.codes), [f.code for f in found]
    if case.true_share:
        for finding in (f for f in found if f.code == "zero-filled"):
            ((letter, matrix),) = finding.settings
            true = clean.shape["ijk".index(letter)]
            assert matrix == pytest.approx(true, rel=0.05 if magnitude else 0.02)
