"""The shipped protocols: one for each sequence family, valid, commented, and playable."""

from __future__ import annotations

import typing
from pathlib import Path

import pytest

from mrics.protocol import (
    console_difference,
    limit_findings,
    load_protocol,
    play_pattern,
    scan_time,
)
from mrics.protocol.sections import Family
from mrics.sampling import draw_entry

FOLDER = Path(__file__).parents[2] / "protocols"
FILES = sorted(FOLDER.glob("*.toml"))


def test_every_family_has_one():
    assert {load_protocol(file).sequence.family for file in FILES} == set(typing.get_args(Family))


@pytest.mark.parametrize("file", FILES, ids=lambda file: file.stem)
def test_every_arm_is_drawn_played_and_timed(file):
    protocol = load_protocol(file)
    assert protocol.scan_files()
    grid = (protocol.grid.phase_steps,)
    if protocol.sequence.three_d:
        grid += (protocol.grid.partition_steps,)
    for arm in protocol.arms():
        drawn = draw_entry(arm.sampling, grid, arm.acceleration, protocol.study.seed)
        played = play_pattern(protocol, drawn)
        timing = scan_time(protocol, played.pattern, arm=arm)
        assert timing.scan_time_s <= timing.full_scan_time_s
        assert limit_findings(protocol.sequence, played.pattern) == ()
        if protocol.sequence.calibration_scan == "inside":
            assert timing.shots == played.shots
        if arm.today:
            said = console_difference(protocol.sequence, timing.scan_time_s) or ""
            assert not said.startswith("Warning")


@pytest.mark.parametrize("file", FILES, ids=lambda file: file.stem)
def test_every_key_has_a_comment(file):
    for line in file.read_text(encoding="utf-8").splitlines():
        if "=" in line.split("#")[0] and not line.startswith(("title", "question", "  {")):
            assert "#" in line, line
