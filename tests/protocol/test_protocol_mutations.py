"""Protocols with random damage: read, or refused with a place and a way out; never a traceback."""

from __future__ import annotations

import random

import pytest
from texts import ANKLE_2D, KNEE_3D

from mrics.errors import MricsError
from mrics.protocol import from_text

VALUES = [
    *("0", "-1", "1e308", "inf", "nan", "true", "''", "'a'", "[]", "[1]", "{}", "{a=1}"),
    *("1979-05-27", "07:32:00", "9999999999999999999999", "[[1]]", "[{}]", "'i'", "0.5", "2"),
    *("'power'", "[1.5,'x']", "{pattern='full'}", "{method=3}", "{law='table'}"),
]
LINES = [
    *("pattern = 'full'", "pattern = 'spokes'", "steps = [2, 2]", "law = 'energy'", "frames = 3"),
    *("averages = 2", "order = 'linear'", "name = 'x'", "table = 'x'", "training = []", "[coils]"),
    *("number = 3", "[[sampling]]", "[[recovery]]", "weight = 'auto'", "calibration = [3, 4]"),
]
ODD = "\0\t\"#'.=[]{}\x7f\u00e9\u20ac\U0001f600"


def damaged(text: str, rng: random.Random) -> str:
    lines = text.split("\n")
    for _ in range(rng.choice([1, 1, 2, 4])):
        at = rng.randrange(len(lines))
        line = lines[at]
        match rng.randrange(6):
            case 0:
                lines.pop(at)
            case 1:
                lines.insert(rng.randrange(len(lines)), line)
            case 2:
                lines[at] = f"{line.split('=')[0]}= {rng.choice(VALUES)}"
            case 3:
                cut = rng.randrange(len(line) + 1)
                lines[at] = line[:cut] + rng.choice(ODD) + line[cut + 1 :]
            case 4:
                lines.insert(at, rng.choice(LINES))
            case 5:
                lines[at] = line[: rng.randrange(len(line) + 1)]
    return "\n".join(lines)


@pytest.mark.parametrize("text", [KNEE_3D, ANKLE_2D])
def test_damage_is_refused_or_read(text):
    rng = random.Random(20261201)
    read, unhelpful = 0, []
    for _ in range(1500):
        mutated = damaged(text, rng)
        try:
            protocol = from_text(mutated, "x.toml")
            assert protocol.arms()
            read += 1
        except MricsError as error:
            if not (error.what and error.where and error.fix):
                unhelpful.append(mutated)
    assert not unhelpful
    # The damage is neither harmless nor total.
    assert 75 < read < 750
