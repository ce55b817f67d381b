"""Inclusion of bernoulli, exact-count and jittered draws: binomial over 2,000 draws.

Every position with 0 < p < 1 gets an exact two-sided p-value; the smallest must stay above 1e-3
divided by the number of positions. p = 0 and p = 1 are exact.
"""

import numpy as np
import pytest
from binomial import smallest_p_value

from mrics.numerics import stream
from mrics.sampling import draw_pattern
from mrics.sampling.probability import ONE
from mrics.sampling.realise import realise, realise_frames

DRAWS = 2000
CASES = [
    ((256,), {"law": "power", "acceleration": 4, "calibration": 24}),
    ((255,), {"law": "gaussian", "acceleration": 3, "calibration": 16}),
    ((128, 96), {"law": "power", "acceleration": 6, "calibration": 12, "elliptical": True}),
    ((128, 128), {"law": "uniform", "acceleration": 8, "calibration": 0}),
    ((101, 77), {"law": "inverse-square", "acceleration": 5, "calibration": 8}),
]


def counted(shape, settings, draw, frames):
    """Probabilities, and how often each position came up in DRAWS draws (of the last frame)."""
    pattern = draw_pattern(shape, draw="exact-count", seed=0, **settings)
    quanta = np.rint(pattern.probability * ONE).astype(np.int64)
    certain = quanta == ONE
    hits = np.zeros(shape, dtype=np.int64)
    for number in range(DRAWS):
        generator = stream(number, "campaign", draw)
        if frames:
            drawn = realise_frames(draw, "complementary", frames, quanta, certain, generator)
            hits += drawn.mask[-1]
        else:
            hits += realise(draw, quanta, certain, generator).mask
    return pattern.probability, hits


@pytest.mark.slow
@pytest.mark.parametrize("draw", ["bernoulli", "exact-count", "jittered"])
@pytest.mark.parametrize(("shape", "settings"), CASES)
def test_inclusion_is_binomial(shape, settings, draw):
    check(*counted(shape, settings, draw, 0))


@pytest.mark.slow
@pytest.mark.parametrize("draw", ["bernoulli", "exact-count"])
@pytest.mark.parametrize(("shape", "settings"), CASES[:3])
def test_frames_keep_the_law(shape, settings, draw):
    check(*counted(shape, settings, draw, 4))


def check(p, hits):
    assert (hits[p == 1] == DRAWS).all()
    assert (hits[p == 0] == 0).all()
    random = (p > 0) & (p < 1)
    smallest = smallest_p_value(hits[random], p[random], DRAWS)
    print(f"\n{random.sum()} positions, smallest p-value x positions {smallest * random.sum():.3f}")
    assert smallest > 1e-3 / random.sum()
