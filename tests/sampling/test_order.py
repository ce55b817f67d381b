"""Order of acquisition: every position once, centre on the wanted echo, whole shots, jumps."""

from __future__ import annotations

import numpy as np
import pytest

from mrics.errors import PatternError
from mrics.sampling import Pattern, draw_entry, draw_pattern
from mrics.sampling.order import SCHEMES, order_pattern
from mrics.sampling.ordered import kept_order, squared_radius

KNEE = {"law": "power", "calibration": 16, "elliptical": True}


@pytest.fixture(scope="module")
def plane() -> Pattern:
    return draw_entry(KNEE, (96, 64), 4, 3)


@pytest.fixture(scope="module")
def line() -> Pattern:
    return draw_entry({"law": "power", "calibration": 20}, (192,), 3, 3)


def full(*grid: int) -> Pattern:
    return Pattern(np.ones(grid, dtype=bool), calibration=(0,) * len(grid))


def echo_map(pattern: Pattern) -> np.ndarray:
    """Echo of every position, -1 where nothing is acquired."""
    echo = np.full(pattern.grid, -1)
    assert pattern.order is not None
    echo[pattern.mask] = pattern.order[:, 1]
    return echo


@pytest.mark.parametrize("scheme", SCHEMES)
@pytest.mark.parametrize("length", [1, 7, 16, 50])
@pytest.mark.parametrize("rule", ["add", "drop", "idle"])
def test_every_position_has_a_slot_of_its_own(plane, scheme, length, rule):
    ordered = order_pattern(plane, train_length=length, scheme=scheme, whole_shots=rule)
    order = ordered.pattern.order
    assert order is not None
    assert len(order) == ordered.pattern.mask.sum() == ordered.rounded.after
    assert len(np.unique(order, axis=0)) == len(order)
    assert order.min() == 0
    assert order[:, 1].max() == length - 1
    assert order[:, 0].max() == ordered.shots - 1
    assert ordered.shots * length - ordered.rounded.idle == len(order)
    per_shot = np.bincount(order[:, 0])
    assert (per_shot[:-1] == length).all()
    if rule != "idle":
        assert ordered.rounded.idle == 0


@pytest.mark.parametrize("scheme", SCHEMES)
@pytest.mark.parametrize("echo", range(16))
def test_the_centre_falls_on_the_wanted_echo(plane, scheme, echo):
    wanted = 5.0 * (echo + 1)
    ordered = order_pattern(
        plane, train_length=16, scheme=scheme, spacing_ms=5.0, echo_time_ms=wanted
    )
    assert echo_map(ordered.pattern)[48, 32] == echo
    assert ordered.centre_ms == wanted
    assert ordered.centre_echo == echo


def test_an_echo_time_between_echoes_is_said(line):
    ordered = order_pattern(line, train_length=8, spacing_ms=10.0, echo_time_ms=37.0)
    assert ordered.centre_ms == 40.0
    assert any("40 ms in place of the 37 ms" in f for f in ordered.findings)


def test_without_an_echo_time_the_scheme_decides(line):
    assert order_pattern(line, train_length=8, scheme="linear").centre_echo in (3, 4)
    assert order_pattern(line, train_length=8, scheme="centre-out").centre_echo == 0
    assert order_pattern(line, train_length=8).centre_ms is None


def test_linear_goes_along_the_phase_axis():
    ordered = order_pattern(full(64), train_length=8)
    # Interleaved trains: shot s plays lines s, s + 8, s + 16, ... (textbook segmentation).
    assert (echo_map(ordered.pattern) == np.arange(64) // 8).all()
    assert ordered.pattern.order is not None
    assert (ordered.pattern.order[:, 0] == np.arange(64) % 8).all()
    assert (ordered.echo_jumps == 8).all()
    assert ordered.step_radius is None


def test_centre_out_goes_outward():
    ordered = order_pattern(full(64), train_length=8, scheme="centre-out")
    echo, k = echo_map(ordered.pattern), np.abs(np.arange(64) - 32)
    for earlier in range(7):
        assert k[echo == earlier].max() <= k[echo == earlier + 1].min()


@pytest.mark.parametrize("scheme", ["centre-out", "radial-sector"])
@pytest.mark.parametrize(("echo", "inward"), [(0, False), (3, False), (12, True), (15, True)])
def test_radial_orders_keep_the_step_in_the_outer_half(plane, scheme, echo, inward):
    ordered = order_pattern(
        plane, train_length=16, scheme=scheme, spacing_ms=1.0, echo_time_ms=echo + 1.0
    )
    positions = np.argwhere(ordered.pattern.mask)
    radius = squared_radius(positions, (96, 64))
    assert ordered.pattern.order is not None
    means = np.array([radius[ordered.pattern.order[:, 1] == e].mean() for e in range(16)])
    # From the centre's echo on, radius grows (falls towards it where the order runs inward).
    run = means[: echo + 1][::-1] if inward else means[echo:]
    assert (np.diff(run) > 0).all()
    if echo in (0, 15):
        assert ordered.step_radius is None
    else:
        inside = (radius < (ordered.step_radius * 96 * 64 / 2) ** 2 - 1e-6).mean()
        assert inside >= 0.5


def test_linear_says_where_its_decay_steps():
    # 64 lines in 8 bands of 8, the centre (line 32, band 4) moved to echo 1. Forward, echoes 0 and
    # 7 would meet at line 24, k = -8 of 32; backward, band 5 has echo 0 and band 6 echo 7, so they
    # meet at lines 47 and 48, k = 15 and 16 (counted).
    ordered = order_pattern(full(64), train_length=8, spacing_ms=1.0, echo_time_ms=2.0)
    echo = echo_map(ordered.pattern)
    assert (echo[32], echo[47], echo[48]) == (1, 0, 7)
    assert ordered.step_radius == pytest.approx(15 / 32)
    assert any("meet at 0.47 k_max" in f for f in ordered.findings)


def test_linear_runs_backward_rather_than_step():
    # Wanted echo 3 of 8 where the centre is in band 4: backward, band 4 is echo 3 and nothing
    # steps.
    ordered = order_pattern(full(64), train_length=8, spacing_ms=1.0, echo_time_ms=4.0)
    assert ordered.step_radius is None
    assert (echo_map(ordered.pattern) == 7 - np.arange(64) // 8).all()


def test_sectors_keep_successive_echoes_close(plane):
    jumps = {
        scheme: order_pattern(plane, train_length=16, scheme=scheme).echo_jumps.mean()
        for scheme in SCHEMES
    }
    assert jumps["radial-sector"] < 0.5 * jumps["centre-out"]
    # A shot of sectors crosses half of k-space in 16 echoes: mean step near 48 / 16.
    assert jumps["radial-sector"] < 2 * 48 / 16


def test_shots_of_sectors_keep_to_an_angle():
    ordered = order_pattern(full(64, 64), train_length=16, scheme="radial-sector")
    order = ordered.pattern.order
    assert order is not None
    positions = np.argwhere(ordered.pattern.mask) - 32
    turn = np.exp(1j * np.arctan2(positions[:, 1], positions[:, 0]))
    outer = order[:, 1] >= 4
    together = [abs(turn[outer & (order[:, 0] == shot)].mean()) for shot in range(ordered.shots)]
    assert min(together) > 0.95


def test_jump_distribution():
    # 6 lines, trains of 3: shots 0, 2, 4 and 1, 3, 5 (counted).
    numbers = order_pattern(full(6), train_length=3).numbers()
    assert numbers["echo_jumps"] == {"mean": 2.0, "median": 2.0, "p95": 2.0, "max": 2.0}
    assert numbers["shot_jumps"] == {"mean": 3.0, "median": 3.0, "p95": 3.0, "max": 3.0}
    assert order_pattern(full(6), train_length=1).numbers()["echo_jumps"] is None


class TestWholeShots:
    def test_add_takes_the_next_most_probable(self, plane):
        rounded = order_pattern(plane, train_length=50, whole_shots="add").rounded
        assert rounded.after % 50 == 0
        assert 0 < rounded.after - rounded.before < 50
        added = rounded.mask & ~plane.mask
        left = ~rounded.mask & plane.shutter
        assert plane.probability[added].min() >= plane.probability[left].max()

    def test_drop_takes_the_least_probable(self, plane):
        rounded = order_pattern(plane, train_length=50, whole_shots="drop").rounded
        assert rounded.after % 50 == 0
        assert 0 < rounded.before - rounded.after < 50
        dropped = plane.mask & ~rounded.mask
        assert plane.probability[dropped].max() <= plane.probability[rounded.mask].min()

    def test_counts_and_rule_are_stored_and_said(self, plane):
        ordered = order_pattern(plane, train_length=50)
        settings = ordered.pattern.settings
        assert settings["requested_count"] == 96 * 64 / 4
        assert settings["count_before_shots"] == plane.mask.sum()
        assert settings["count"] == ordered.pattern.mask.sum()
        assert settings["whole_shots"] == "add"
        (said,) = ordered.findings
        assert f"{plane.mask.sum()} positions in whole shots of 50" in said
        assert f"most probable {settings['count'] - plane.mask.sum()} added" in said

    def test_nothing_to_round_is_not_mentioned(self):
        assert order_pattern(full(64), train_length=8).findings == ()

    def test_regular_patterns_keep_their_lattice(self):
        lattice = draw_entry({"pattern": "equispaced", "calibration": 24}, (256,), 3, 0)
        # 101 lines (counted, N = 256, R = 3, 24 calibration lines) in trains of 12: 9 trains with
        # 7 echoes left over.
        ordered = order_pattern(lattice, train_length=12)
        assert (ordered.pattern.mask == lattice.mask).all()
        assert (ordered.shots, ordered.rounded.idle) == (9, 7)
        assert "7 echoes left idle" in ordered.findings[0]
        filled = order_pattern(lattice, train_length=12, whole_shots="add")
        extra = np.flatnonzero(filled.pattern.mask & ~lattice.mask) - 128
        assert len(extra) == 7
        # Without probabilities, those nearest to the centre: first the lines outside +-12.
        assert np.abs(extra).max() <= 20

    def test_a_full_grid_leaves_echoes_idle(self):
        # 224 lines in trains of 12: 19 trains, 4 echoes over (worked scan-time example).
        ordered = order_pattern(full(224), train_length=12, whole_shots="add")
        assert (ordered.shots, ordered.rounded.idle) == (19, 4)

    def test_added_positions_stay_in_the_shutter(self):
        pattern = draw_entry({**KNEE, "partial_fourier": 0.75}, (64, 48), 2, 0)
        ordered = order_pattern(pattern, train_length=97)
        assert not (ordered.pattern.mask & ~pattern.shutter).any()

    def test_calibration_is_not_dropped(self):
        mask = np.zeros(64, dtype=bool)
        mask[20:44] = True
        pattern = Pattern(mask, calibration=(24,))
        with pytest.raises(PatternError, match=r"4 positions must be dropped.*only 0"):
            order_pattern(pattern, train_length=10, whole_shots="drop")


def test_frames_are_rounded_and_ordered_one_by_one():
    pattern = draw_entry({**KNEE, "draw": "bernoulli"}, (48, 32), 4, 1, frames=3)
    ordered = order_pattern(
        pattern, train_length=12, scheme="radial-sector", spacing_ms=4.0, echo_time_ms=8.0
    )
    order, start = ordered.pattern.order, 0
    assert order is not None
    for mask in ordered.pattern.mask:
        assert mask.sum() % 12 == 0
        mine = order[start : start + int(mask.sum())]
        assert len(np.unique(mine, axis=0)) == len(mine)
        centre = np.flatnonzero((np.argwhere(mask) == [24, 16]).all(axis=1))[0]
        assert mine[centre, 1] == 1
        start += int(mask.sum())
    assert start == len(order)


def test_an_order_the_pattern_brings_is_described():
    spokes = draw_entry({"pattern": "spokes"}, (48, 48), 4, 0)
    kept = kept_order(spokes)
    assert kept.pattern is spokes
    assert kept.scheme == "own"
    assert np.median(kept.echo_jumps) <= 1.5
    with pytest.raises(PatternError, match="no order"):
        kept_order(full(8))


def test_the_same_order_on_any_machine():
    # Hashes of mask and order as first computed here, so that a later change of order is noticed;
    # radii are compared as integers and angles to nine digits, so they hold on any machine.
    u, v = np.mgrid[:48, :36]
    pattern = Pattern((7 * u + 5 * v + u * v) % 3 == 0, calibration=(0, 0))
    found = {s: order_pattern(pattern, train_length=9, scheme=s).pattern.hash[:12] for s in SCHEMES}
    assert found == {
        "linear": "d715a425a67e",
        "centre-out": "b6e0396ac819",
        "radial-sector": "58a5b64f2eef",
    }


@pytest.mark.parametrize(
    ("keys", "says"),
    [
        ({"train_length": 5000}, "echo train of 5000 is longer than the pattern, which has 1536"),
        ({"train_length": 0}, "train length 0 is not a whole number"),
        ({"train_length": 2.0}, "train length 2.0 is not a whole number"),
        ({"train_length": True}, "train length True is not a whole number"),
        ({"train_length": 8, "scheme": "spiral"}, "scheme = 'spiral' is not known"),
        ({"train_length": 8, "whole_shots": "round"}, "whole_shots = 'round' is not known"),
        ({"train_length": 8, "spacing_ms": 0.0}, "echo spacing 0.0 ms is not a number above 0"),
        ({"train_length": 8, "echo_time_ms": 20.0}, "no echo spacing is given"),
        (
            {"train_length": 8, "spacing_ms": 5.0, "echo_time_ms": 60.0},
            "echo time 60 ms lies outside the train.*from 5 to 40 ms",
        ),
    ],
)
def test_bad_input(plane, keys, says):
    with pytest.raises(PatternError, match=says):
        order_pattern(plane, **keys)


def test_sectors_need_two_axes(line):
    with pytest.raises(PatternError, match="'radial-sector' needs a 2-D pattern"):
        order_pattern(line, train_length=8, scheme="radial-sector")


def test_whole_shots_keep_the_distances_of_poisson_discs():
    pattern = draw_pattern((64, 48), draw="poisson-disc", acceleration=4, calibration=8, seed=2)
    played = order_pattern(pattern, train_length=25, scheme="radial-sector").pattern
    assert played.settings["whole_shots"] == "drop"
    assert not (played.mask & ~pattern.mask).any()
    assert played.acquired % 25 == 0
