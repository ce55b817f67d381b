"""How each sequence family plays a pattern, and which limits of the sequence it breaks."""

from __future__ import annotations

import numpy as np
import pytest
from texts import ANKLE_2D, KNEE_3D, changed

from mrics.errors import ProtocolError
from mrics.protocol import decay_finding, from_text, limit_findings, play_pattern, scan_time
from mrics.protocol.play import line_gap
from mrics.protocol.sections import Sequence
from mrics.sampling import Pattern, draw_entry


def protocol(family: str, *keys: str, base: str = KNEE_3D):
    old = "gradient-echo-3d" if base is KNEE_3D else "turbo-spin-echo-2d"
    lines = "".join(f"{key}\n" for key in keys)
    text = changed(base, f'family = "{old}"\n', f'family = "{family}"\n{lines}')
    for key in keys:
        name = key.split(" = ")[0]
        first, *rest = text.split(f"\n{name} = ")
        if len(rest) > 1:
            # The keys given stand first; take the base's own away.
            tail = rest[1].split("\n", 1)[1]
            text = f"{first}\n{name} = {rest[0]}\n{tail}"
    return from_text(text, "p.toml")


@pytest.fixture(scope="module")
def plane() -> Pattern:
    return draw_entry({"law": "power", "calibration": 16, "elliptical": True}, (96, 64), 4, 3)


@pytest.fixture(scope="module")
def line() -> Pattern:
    return draw_entry({"law": "power", "calibration": 20}, (224,), 2, 3)


def test_turbo_spin_echo_reaches_its_echo_time(line):
    asked = from_text(ANKLE_2D)
    played = play_pattern(asked, line)
    assert played.centre_ms == 36.0
    assert played.rounded.after == 120
    timing = scan_time(asked, played.pattern)
    assert timing.shots == played.shots == 10
    assert not any("holds" in finding for finding in timing.findings)


@pytest.mark.parametrize(("echo_ms", "scheme"), [(9, "centre-out"), (54, "linear")])
def test_turbo_spin_echo_chooses_the_order_that_steps_farthest_out(line, echo_ms, scheme):
    asked = protocol("turbo-spin-echo-2d", f"echo_time_ms = {echo_ms}", base=ANKLE_2D)
    played = play_pattern(asked, line)
    assert (played.scheme, played.centre_ms) == (scheme, echo_ms)
    assert played.step_radius is None or played.step_radius > 0.5


def test_an_order_asked_for_is_kept(plane):
    keys = ["repetition_time_ms = 1200", "echo_train_length = 24", "echo_spacing_ms = 4"]
    keys += ["echo_time_ms = 12.0", 'order = "linear"']
    played = play_pattern(protocol("turbo-spin-echo-3d", *keys), plane)
    assert (played.scheme, played.centre_ms) == ("linear", 12.0)
    free = play_pattern(protocol("turbo-spin-echo-3d", *keys[:-1]), plane)
    assert free.scheme == "radial-sector"


def test_prepared_train_has_the_centre_at_its_inversion_time(plane):
    keys = ["repetition_time_ms = 2000", "echo_train_length = 64", "echo_spacing_ms = 8"]
    played = play_pattern(
        protocol("inversion-gradient-echo-3d", *keys, "inversion_time_ms = 900"), plane
    )
    assert played.train_length == 64
    assert played.centre_ms == 900.0
    assert played.times_ms is not None
    start = 900 - 8 * played.centre_echo
    assert played.times_ms[0] == start
    assert played.centre_echo == pytest.approx(32, abs=3)
    outward = play_pattern(
        protocol(
            "inversion-gradient-echo-3d", *keys, "inversion_time_ms = 900", 'order = "centre-out"'
        ),
        plane,
    )
    assert (outward.centre_echo, outward.times_ms[0]) == (0, 900.0)


def test_prepared_train_of_one_line_per_inversion(plane):
    played = play_pattern(
        protocol("inversion-gradient-echo-3d", "repetition_time_ms = 2000"), plane
    )
    assert played.train_length == 64


@pytest.mark.parametrize(
    ("inversion", "repetition", "says"),
    [
        (150, 2000, "inversion_time_ms = 150 is too short"),
        (900, 1000, "later than repetition_time_ms = 1000"),
    ],
)
def test_prepared_trains_that_do_not_fit(plane, inversion, repetition, says):
    asked = protocol(
        "inversion-gradient-echo-3d",
        f"repetition_time_ms = {repetition}",
        "echo_train_length = 64",
        "echo_spacing_ms = 8",
        f"inversion_time_ms = {inversion}",
    )
    with pytest.raises(ProtocolError, match=says) as caught:
        play_pattern(asked, plane)
    assert caught.value.where.startswith("p.toml, line ")


def test_planar_shots_interleave():
    full = Pattern(np.ones(128, dtype=bool), calibration=(0,))
    asked = protocol(
        "echo-planar-2d",
        "echo_train_length = 32",
        "echo_spacing_ms = 1",
        "echo_time_ms = 30",
        base=ANKLE_2D,
    )
    played = play_pattern(asked, full)
    # 128 lines in trains of 32: 4 interleaved shots, so successive echoes are 4 lines apart.
    assert played.shots == 4
    assert (played.echo_jumps == 4).all()
    assert played.centre_ms == 30.0


def test_single_shot_holds_the_whole_pattern(line):
    text = changed(ANKLE_2D, "turbo-spin-echo-2d", "echo-planar-2d")
    text = changed(text, "echo_train_length = 12\n", "")
    played = play_pattern(from_text(changed(text, "spacing_ms = 9", "spacing_ms = 0.3")), line)
    assert (played.shots, played.train_length) == (1, 112)


def test_sequences_of_one_echo(plane):
    played = play_pattern(from_text(KNEE_3D), plane)
    assert (played.train_length, played.shots) == (1, plane.mask.sum())
    assert played.pattern.mask is not None
    assert (played.pattern.mask == plane.mask).all()
    spokes = draw_entry({"pattern": "spokes"}, (48, 48), 4, 0)
    assert play_pattern(from_text(KNEE_3D), spokes).pattern is spokes


def test_a_train_longer_than_the_pattern_names_its_key(line):
    asked = protocol("turbo-spin-echo-2d", "echo_train_length = 113", base=ANKLE_2D)
    with pytest.raises(ProtocolError, match="echo train of 113 is longer than the pattern") as e:
        play_pattern(asked, line)
    assert "sequence.echo_train_length" in e.value.where


def test_decay_is_said_where_a_t2_is_given(line):
    # 224 lines in trains of 12 echoes, linear, 9 ms apart: a train of 108 ms over k-space, T/T2 = 2
    # at T2 = 54 ms. In 12 bands it is nearly the smooth decay: 1.4053 voxels wide in place of
    # 1.2067, peak (1 - exp(-2))/2 = 43 % (point spread of T2 decay, Qin 2012, computed) of a train
    # whose echoes lie in the middle of their bands; ours come half a spacing later, 9 % less.
    full = Pattern(np.ones(224, dtype=bool), calibration=(0,))
    asked = protocol("turbo-spin-echo-2d", "tissue_t2_ms = 54", "echo_time_ms = 54", base=ANKLE_2D)
    said = decay_finding(asked.sequence, play_pattern(asked, full)) or ""
    assert said.startswith("A T2 of 54 ms along the train changes a point along phase 1.21 to 1.4")
    assert "its peak is 40% of" in said
    assert decay_finding(from_text(ANKLE_2D).sequence, play_pattern(asked, line)) is None


def test_limits_of_the_sequence():
    mask = np.zeros(64, dtype=bool)
    mask[[2, 10, 28, 30, 31, 32, 33, 34, 60]] = True
    pattern = Pattern(mask, calibration=(0,))
    assert line_gap(pattern) == 26
    keys = {"family": "turbo-spin-echo-2d", "repetition_time_ms": 3000.0, "echo_train_length": 4}
    within = Sequence(**keys, max_table_positions=9, max_line_gap=26, min_echo_train_length=4)
    assert limit_findings(within, pattern) == ()
    beyond = Sequence(**keys, max_table_positions=8, max_line_gap=25, min_echo_train_length=5)
    table, gap, train = limit_findings(beyond, pattern)
    assert "9 positions; the sequence reads 8" in table
    assert "26 steps apart; the sequence plays 25" in gap
    assert "4 echoes; the sequence plays at least 5" in train
    assert limit_findings(Sequence(**keys), pattern) == ()


def test_line_gap_of_a_plane_counts_lines_with_any_position():
    mask = np.zeros((8, 16), dtype=bool)
    mask[::2, 8] = True
    mask[4, ::5] = True
    assert line_gap(Pattern(mask, calibration=(0, 0))) == 5
    series = np.stack([mask, mask])
    series[1, 0] = False
    assert line_gap(Pattern(series, frames=2, calibration=(0, 0))) == 5
