"""Coverage of nominal 95 % intervals over 2,000 simulated studies."""

import numpy as np
import pytest

from mrics.quality import compare
from mrics.quality.confidence import estimate

STUDIES = 2000


def draws_of(generator, scans, kind):
    if kind == "normal":
        scan = generator.standard_normal((scans, 1))
    else:
        scan = generator.exponential(size=(scans, 1)) - 1.0
    return scan + 0.5 * generator.standard_normal((scans, 5))


def coverage(scans, kind):
    hits = 0
    for number in range(STUDIES):
        values = draws_of(np.random.default_rng([7, scans, number]), scans, kind)
        table = {i: dict(enumerate(row)) for i, row in enumerate(values)}
        interval = estimate(table, seed=number).interval()
        hits += interval.low <= 0.0 <= interval.high
    return hits / STUDIES


@pytest.mark.slow
@pytest.mark.parametrize("scans", [3, 5, 10, 20])
def test_normal_scans(scans):
    share = coverage(scans, "normal")
    print(f"normal, {scans} scans x 5 draws: {100 * share:.2f} %")
    assert 0.935 <= share <= 0.965


@pytest.mark.slow
@pytest.mark.parametrize("scans", [3, 5, 10, 20])
def test_paired_differences(scans):
    hits = 0
    for number in range(STUDIES):
        generator = np.random.default_rng([8, scans, number])
        shared = 3.0 * draws_of(generator, scans, "skewed")
        effect = 0.4 + draws_of(generator, scans, "normal")
        records = [
            [(i, j, 0, float(v)) for (i, j), v in np.ndenumerate(values)]
            for values in (shared + effect, shared)
        ]
        interval = compare(*records, seed=number).interval
        hits += interval.low <= 0.4 <= interval.high
    print(f"paired, {scans} scans x 5 draws: {100 * hits / STUDIES:.2f} %")
    assert 0.935 <= hits / STUDIES <= 0.965


@pytest.mark.slow
@pytest.mark.parametrize("scans", [3, 5, 10, 20])
def test_skewed_scans_are_reported(scans):
    """Exponential scan effects: with few scans no interval holds its level; the loss is bounded."""
    share = coverage(scans, "skewed")
    print(f"skewed, {scans} scans x 5 draws: {100 * share:.2f} %")
    assert share >= 0.87
