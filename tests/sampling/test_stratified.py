"""Jittered and low-discrepancy draws."""

import numpy as np
import pytest
from binomial import smallest_p_value
from scipy.stats import qmc

from mrics.numerics import stream
from mrics.sampling import draw_pattern, radial_profile
from mrics.sampling.stratified import curve, hilbert_index, scrambled_sobol, sobol


@pytest.mark.parametrize("draw", ["jittered", "low-discrepancy"])
@pytest.mark.parametrize("shape", [(128,), (257,), (96, 64), (75, 98)])
@pytest.mark.parametrize("acceleration", [1.5, 3, 8])
def test_count_is_exact(draw, shape, acceleration):
    pattern = draw_pattern(shape, draw=draw, acceleration=acceleration, calibration=8, seed=2)
    assert pattern.mask.sum() == round(np.prod(shape) / acceleration)
    assert pattern.mask[pattern.probability == 1].all()
    assert not pattern.mask[pattern.probability == 0].any()


@pytest.mark.parametrize("shape", [(128,), (48, 37)])
def test_jittered_inclusion_is_binomial(shape):
    patterns = [draw_pattern(shape, draw="jittered", calibration=8, seed=s) for s in range(200)]
    p = patterns[0].probability
    hits = np.sum([pattern.mask for pattern in patterns], axis=0)
    random = (p > 0) & (p < 1)
    assert smallest_p_value(hits[random], p[random], 200) > 1e-3 / random.sum()


def test_jittered_lines_never_stray_from_the_expected_count():
    # one position per cell of expected count one: any run holds its expectation to within 2
    for seed in range(20):
        pattern = draw_pattern((256,), draw="jittered", calibration=0, exponent=1, seed=seed)
        stray = np.cumsum(pattern.mask) - np.cumsum(pattern.probability)
        assert np.ptp(stray) <= 2


@pytest.mark.parametrize("settings", [{}, {"law": "gaussian"}, {"law": "uniform"}])
@pytest.mark.parametrize("draw", ["jittered", "low-discrepancy"])
def test_radial_profile_follows_the_law(draw, settings):
    shape = (128, 96)
    patterns = [
        draw_pattern(shape, draw=draw, acceleration=5, calibration=12, seed=s, **settings)
        for s in range(30)
    ]
    profile = radial_profile(patterns)
    assert (profile.expected >= 0.01 * profile.expected.sum()).sum() >= 7
    assert profile.deviation() < 0.1


def test_low_discrepancy_is_lower_than_chance():
    # centred discrepancy by scipy.stats.qmc.discrepancy
    def discrepancy(draw, seed):
        pattern = draw_pattern(
            (128, 128), law="uniform", draw=draw, acceleration=16, calibration=0, seed=seed
        )
        return qmc.discrepancy((np.argwhere(pattern.mask) + 0.5) / 128)

    chance = np.mean([discrepancy("exact-count", s) for s in range(5)])
    for draw, gain in (("low-discrepancy", 5), ("jittered", 2)):
        assert np.mean([discrepancy(draw, s) for s in range(5)]) < chance / gain


def test_sobol_points_are_those_of_a_reference_generator():
    # scipy.stats.qmc.Sobol lists the same points in another (Gray code) order
    first, second = sobol(np.arange(256, dtype=np.uint32))
    ours = {(int(a), int(b)) for a, b in zip(first, second, strict=True)}
    theirs = qmc.Sobol(2, scramble=False, bits=32).random(256) * 2.0**32
    assert ours == {(int(a), int(b)) for a, b in theirs}


def test_scrambling_keeps_one_point_in_every_elementary_interval():
    # a (0, m, 2)-net in base 2 stays one under nested scrambling (Owen 1995)
    first, second = scrambled_sobol(256, stream(3, "net"))
    for split in range(9):
        cell = (first >> np.uint32(32 - split) if split else np.zeros(256, np.uint32)).astype(int)
        rest = 8 - split
        other = (second >> np.uint32(32 - rest) if rest else np.zeros(256, np.uint32)).astype(int)
        assert np.unique(cell * 2**rest + other).size == 256


def test_hilbert_curve_visits_every_square_once_by_single_steps():
    u, v = (axis.ravel() for axis in np.indices((32, 32)))
    index = hilbert_index(u, v, 32)
    order = np.argsort(index)
    assert sorted(index) == list(range(1024))
    assert (np.abs(np.diff(u[order])) + np.abs(np.diff(v[order])) == 1).all()
    assert sorted(curve((20, 33), stream(1, "walk"))) == list(range(660))
