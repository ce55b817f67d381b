"""Random draws: inclusion frequencies, counts, reproducibility."""

import numpy as np
import pytest
from binomial import smallest_p_value

from mrics.sampling import draw_pattern


@pytest.mark.parametrize("draw", ["bernoulli", "exact-count"])
@pytest.mark.parametrize("shape", [(128,), (48, 37)])
@pytest.mark.parametrize("law", ["power", "uniform"])
def test_inclusion_is_binomial(draw, shape, law):
    # one tenth of the table in tests/campaigns
    patterns = [
        draw_pattern(shape, law=law, draw=draw, acceleration=4, calibration=8, seed=seed)
        for seed in range(200)
    ]
    p = patterns[0].probability
    hits = np.sum([pattern.mask for pattern in patterns], axis=0)
    assert (hits[p == 1] == 200).all()
    assert (hits[p == 0] == 0).all()
    random = (p > 0) & (p < 1)
    assert smallest_p_value(hits[random], p[random], 200) > 1e-3 / random.sum()


def test_bernoulli_counts_vary_as_the_law_says():
    # sum of independent draws: variance sum p (1 - p)
    counts = [
        draw_pattern((64, 64), draw="bernoulli", calibration=8, seed=s).mask.sum()
        for s in range(300)
    ]
    p = draw_pattern((64, 64), draw="bernoulli", calibration=8).probability
    spread = np.sqrt((p * (1 - p)).sum())
    assert abs(np.mean(counts) - p.sum()) < 4 * spread / np.sqrt(300)
    assert 0.8 < np.std(counts) / spread < 1.2


def test_another_seed_is_another_pattern_and_the_same_seed_the_same():
    first, again, other = (draw_pattern((256,), seed=s) for s in (1, 1, 2))
    assert first.hash == again.hash
    assert first.hash != other.hash
