"""Series of frames: complementary, independent, the same."""

from dataclasses import replace

import numpy as np
import pytest
from binomial import smallest_p_value

from mrics.errors import PatternError
from mrics.sampling import DRAWS, draw_entry, draw_pattern, radial_profile
from mrics.sampling.disc import disc_conflicts
from mrics.sampling.grid import calibration_block

SHAPE = (96, 64)


def series(draw, frames=6, shape=SHAPE, **settings):
    return draw_pattern(
        shape, draw=draw, frames=frames, **{"acceleration": 8, "calibration": 8, **settings}
    )


@pytest.mark.parametrize("draw", DRAWS)
def test_frames_do_not_repeat_outer_positions(draw):
    pattern = series(draw, exponent=1.5)
    assert pattern.mask.shape == (6, *SHAPE)
    assert pattern.frames == 6
    p = pattern.probability[0]
    times = pattern.mask.sum(axis=0)
    assert (times[p == 1] == 6).all()
    outer = (p > 0) & (p <= 1 / 6)
    assert outer.sum() > 500
    assert times[outer].max() == 1
    if draw != "bernoulli":
        assert (pattern.mask.sum(axis=(1, 2)) == round(np.prod(SHAPE) / 8)).all()
    alone = series(draw, frame_draws="independent", exponent=1.5)
    assert pattern.settings["union_count"] > 1.15 * alone.settings["union_count"]
    assert pattern.settings["union_coverage"] == pattern.mask.any(axis=0).mean()


@pytest.mark.parametrize("draw", ["exact-count", "bernoulli"])
def test_positions_are_taken_as_often_as_their_probability_says(draw):
    pattern = series(draw, frames=5)
    expected = 5 * pattern.probability[0]
    times = pattern.mask.sum(axis=0)
    # floor or one more; 2^-20 for the rounding of p to 2^-30
    assert (times >= np.floor(expected - 2.0**-20)).all()
    assert (times <= np.ceil(expected + 2.0**-20)).all()


@pytest.mark.parametrize("draw", ["exact-count", "bernoulli"])
def test_every_frame_keeps_the_law(draw):
    masks = [
        draw_pattern((64,), draw=draw, frames=4, calibration=8, seed=s).mask for s in range(200)
    ]
    p = draw_pattern((64,), draw=draw, calibration=8).probability
    random = (p > 0) & (p < 1)
    for frame in range(4):
        hits = np.sum([mask[frame] for mask in masks], axis=0)
        assert smallest_p_value(hits[random], p[random], 200) > 1e-3 / (4 * random.sum())


def test_every_frame_keeps_its_distances():
    pattern = series("poisson-disc", law="uniform")
    block = calibration_block(SHAPE, (8, 8))
    for mask, c in zip(pattern.mask, pattern.settings["disc_c"], strict=True):
        assert disc_conflicts(mask, pattern.probability[0], block, c) == 0
        assert c / np.sqrt(pattern.probability.min()) > 1


@pytest.mark.parametrize("draw", ["poisson-disc", "jittered", "low-discrepancy"])
def test_later_frames_keep_the_radial_profile(draw):
    # 7 frames at p up to 1: cycles of every length end within the series
    patterns = [series(draw, frames=7, acceleration=5, seed=s) for s in range(20)]
    for frame in (3, 6):
        alone = [
            replace(q, mask=q.mask[frame], frames=0, probability=q.probability[frame])
            for q in patterns
        ]
        assert radial_profile(alone).deviation() < 0.1


def test_the_same_mask_for_all_frames():
    pattern = series("jittered", frame_draws="same")
    assert (pattern.mask == pattern.mask[0]).all()


def test_lattices_move_on_until_they_cover_the_grid():
    entry = {"pattern": "equispaced", "steps": [2, 3], "frame_draws": "complementary"}
    assert (draw_entry(entry, (48, 36), frames=6).mask.sum(axis=0) == 1).all()
    shifted = {**entry, "pattern": "shifted lattice", "shift": 1}
    assert (draw_entry(shifted, (48, 36), frames=6).mask.sum(axis=0) == 1).all()
    still = draw_entry({"pattern": "equispaced", "acceleration": 2}, (48,), frames=3)
    assert (still.mask == still.mask[0]).all()
    assert still.settings["union_coverage"] == 0.5


def test_spokes_go_on_turning_and_keep_their_order():
    entry = {"pattern": "spokes", "acceleration": 6, "frame_draws": "complementary"}
    pattern = draw_entry(entry, (64, 64), frames=3)
    assert len(pattern.order) == pattern.mask.sum()
    assert not (pattern.mask[0] == pattern.mask[1]).all()
    first = draw_entry({"pattern": "spokes", "acceleration": 6}, (64, 64))
    assert (pattern.mask[0] == first.mask).all()


def test_frames_must_be_whole():
    with pytest.raises(PatternError, match="frames = -1"):
        draw_pattern((64,), frames=-1)
    with pytest.raises(PatternError, match="'shared' is not known"):
        draw_pattern((64,), frames=2, frame_draws="shared")
