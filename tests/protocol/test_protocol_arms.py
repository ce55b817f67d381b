"""How sampling, accelerations, recoveries and today's protocol become arms."""

from __future__ import annotations

import pytest
from texts import ANKLE_2D, KNEE_3D, changed

from mrics.errors import ProtocolError
from mrics.protocol import from_text
from mrics.sampling import draw_entry


def ids(text: str) -> list[str]:
    return [arm.id for arm in from_text(text).arms()]


def test_every_combination_today_first():
    text = KNEE_3D + '\n[[recovery]]\nmethod = "zero-filled"\n'
    assert ids(text) == [
        "today-equispaced-r2-least-squares",
        "power-law-r2-wavelet",
        "power-law-r2-zero-filled",
        "power-law-r4-wavelet",
        "power-law-r4-zero-filled",
        "power-law-r6.5-wavelet",
        "power-law-r6.5-zero-filled",
    ]
    arm = from_text(text).arms()[3]
    assert arm.label == "power law, R = 4, wavelet"
    assert arm.sampling == {
        "name": "power law",
        "acceleration": 4.0,
        "law": "power",
        "exponent": 3.0,
        "draw": "bernoulli",
        "calibration": 24,
        "elliptical": True,
    }
    assert not arm.today
    assert from_text(text).arms()[0].today


def test_ids_do_not_depend_on_other_entries():
    more = '\n[[sampling]]\nname = "even"\nlaw = "uniform"\nacceleration = 3\n'
    assert set(ids(KNEE_3D)) < set(ids(KNEE_3D + more))
    early = changed(KNEE_3D, "[[sampling]]", more + "\n[[sampling]]")
    assert set(ids(early)) == set(ids(KNEE_3D + more))


def test_ids_are_unique_and_fit_for_file_names():
    names = ["Größe 1/2", "Grosse 1 2", "größe 1.2", "///", "..", "пример"]
    text = KNEE_3D + "".join(
        f'\n[[sampling]]\nname = "{n}"\nlaw = "uniform"\nacceleration = 2\n' for n in names
    )
    found = ids(text)
    assert len(set(found)) == len(found) == 4 + len(names)
    assert all(set(i) <= set("abcdefghijklmnopqrstuvwxyz0123456789.-") for i in found)


def test_entries_without_a_name_are_called_by_their_law():
    assert ids(ANKLE_2D) == ["uniform-r2-zero-filled"]
    twice = changed(
        ANKLE_2D, "[[recovery]]", '[[sampling]]\nlaw = "uniform"\nacceleration = 2\n[[recovery]]'
    )
    assert ids(twice) == ["uniform-r2-zero-filled", "uniform-2-r2-zero-filled"]


def test_today_takes_over_a_named_entry():
    text = changed(KNEE_3D, 'sampling = "equispaced"', 'sampling = "power law"\ncalibration = 20')
    today = from_text(text).arms()[0]
    assert today.sampling["calibration"] == 20
    assert today.sampling["law"] == "power"
    assert today.id == "today-power-law-r2-least-squares"


def test_today_as_a_law_a_pattern_or_a_table():
    law = from_text(changed(KNEE_3D, '"equispaced"', '"uniform"')).arms()[0]
    assert law.sampling["law"] == "uniform"
    table = from_text(
        changed(
            changed(KNEE_3D, '"equispaced"', '{ pattern = "equispaced", steps = [2, 2] }'),
            "acceleration = 2\n",
            "averages = 3\n",
        )
    ).arms()[0]
    assert (table.acceleration, table.averages) == (4.0, 3)
    full = from_text(changed(KNEE_3D, '"equispaced"\nacceleration = 2', '"full"')).arms()[0]
    assert full.acceleration == 1.0
    with pytest.raises(ProtocolError, match="takes no key 'calibratin'"):
        from_text(changed(KNEE_3D, '"equispaced"', '"equispaced"\ncalibratin = 3'))


def test_today_alone_is_enough():
    text = KNEE_3D[: KNEE_3D.index("[[sampling]]")] + KNEE_3D[KNEE_3D.index("[acceptance]") :]
    assert ids(text) == ["today-equispaced-r2-least-squares"]


def test_every_arm_can_be_drawn():
    for arm in from_text(KNEE_3D).arms():
        pattern = draw_entry(arm.sampling, (96, 80), arm.acceleration, 1)
        assert pattern.acceleration == pytest.approx(arm.acceleration, rel=0.2)


def test_files_of_an_entry_are_relative_to_the_protocol(tmp_path):
    own = '[[sampling]]\nname = "own table"\npattern = "file"\nfile = "tables/own.csv"\n'
    own += '[[sampling]]\nlaw = "energy"\ntraining = ["a.nii", "/data/b.nii"]\nacceleration = 3\n'
    text = changed(KNEE_3D, "[[recovery]]", own + "[[recovery]]")
    arms = {arm.id: arm for arm in from_text(text, tmp_path / "p.toml").arms()}
    table = arms["own-table-wavelet"]
    assert table.acceleration is None
    assert table.sampling["file"] == str(tmp_path / "tables" / "own.csv")
    assert table.label == "own table, from file, wavelet"
    energy = arms["energy-r3-wavelet"]
    assert energy.sampling["training"] == (str(tmp_path / "a.nii"), "/data/b.nii")
