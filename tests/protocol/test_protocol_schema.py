"""What a protocol file may say, and what is said of one that may not."""

from __future__ import annotations

import re

import pytest
from texts import ANKLE_2D, KNEE_3D, changed

from mrics.errors import ProtocolError
from mrics.protocol import from_text, load_protocol


def test_reads_every_section(tmp_path):
    file = tmp_path / "knee.toml"
    file.write_text(KNEE_3D, encoding="utf-8")
    protocol = load_protocol(file)
    assert protocol.path == file
    assert protocol.title == "Knee, 3-D proton density, faster"
    assert protocol.sequence.repetition_time_ms == 12.0
    assert protocol.sequence.averages == 1
    assert (protocol.axes().readout, protocol.axes().partition) == ("i", "k")
    assert protocol.grid.phase_steps == 300
    assert protocol.sampling[0].extra["exponent"] == 3.0
    assert [(limit.key, limit.value) for limit in protocol.acceptance] == [("ssim_min", 0.95)]
    assert protocol.study.draws == 5
    assert protocol.coils is None


def test_hash_is_of_the_text():
    # SHA-256 of the empty string, FIPS 180-4 (a known value).
    import hashlib

    protocol = from_text(KNEE_3D)
    assert protocol.sha256 == hashlib.sha256(KNEE_3D.encode()).hexdigest()
    assert from_text(KNEE_3D + "\n# a remark").sha256 != protocol.sha256


def test_values_hold_defaults_and_are_plain():
    import json

    values = json.loads(json.dumps(from_text(ANKLE_2D).values()))
    assert values["sequence"]["dummy_shots"] == 0
    assert values["grid"]["readout_axis"] == "i"
    assert values["sampling"] == [
        {
            "name": None,
            "acceleration": [2.0],
            "search_from": 1.5,
            "search_to": 9.0,
            "search_steps": 16,
            "averages": None,
            "law": "uniform",
        }
    ]


def test_a_protocol_cannot_be_changed():
    protocol = from_text(KNEE_3D)
    with pytest.raises(AttributeError):
        protocol.text = ""  # type: ignore[misc]
    with pytest.raises(ValueError, match="frozen"):
        protocol.study.draws = 6
    assert isinstance(from_text(changed(KNEE_3D, "24", "[24, 20]")).sampling[0].extra, dict)
    assert from_text(changed(KNEE_3D, "24", "[24, 20]")).sampling[0].extra["calibration"] == (
        24,
        20,
    )


REFUSED = [
    # (passage, what replaces it, what the error says, what it names as the place)
    ("repetition_time_ms", "repetition_tme_ms", "Did you mean 'repetition_time_ms'", "line 7"),
    ("question", "questoin", "Did you mean 'question'", "line 3, key protocol.questoin"),
    ("[grid]", "[gird]", "Did you mean 'grid'", "line 11"),
    ("exponent", "exponnt", "nearest is 'exponent'", r"line 26, key sampling\[1\].exponnt"),
    ('method = "wavelet"', 'method = "wavlet"', "did you mean 'wavelet'", r"recovery\[1\]"),
    ('method = "wavelet"', 'method = "wavelet"\nweigt = 2', "mean 'weight'", "line 34"),
    ("ssim_min", "sim_min", "Did you mean 'ssim_min'", "line 36, key acceptance.sim_min"),
    ("ssim_min", "ssim_max", "wrong side: higher is better.*Use ssim_min", "line 36"),
    ("0.95", "nan", "acceptance.ssim_min = nan", "line 36"),
    ("0.95", "true", "ssim_min = true is not allowed", "line 36"),
    ("_ms = 12", "_ms = -12", "-12 is not allowed.*above 0 up to 600000", "line 7"),
    ("_ms = 12", '_ms = "12"', "'12' is not allowed.*a number above 0", "line 7"),
    ("_ms = 12", "_ms = inf", "inf is not allowed", "line 7"),
    ("gradient-echo-3d", "gradient-ecko", "one of 'gradient-echo-2d', 'grad", "sequence.family"),
    ("draws = 5", "draws = 2.5", "2.5 is not allowed.*whole number from 1", "study.draws"),
    ("draws = 5", "draws = true", "true is not allowed.*whole number from 1", "study.draws"),
    ("draws = 5", "draws = 0", "draws = 0 is not allowed", "study.draws"),
    ("= 20261201", "= -1", "seed = -1.*whole number from 0", "study.seed"),
    ("= 20261201", "= 1979-05-27", "seed = .1979-05-27. is not allowed", "study.seed"),
    ("6.5]", "0.5]", "0.5 is not allowed.*from 1 up to", r"sampling\[1\].acceleration\[3\]"),
    ("[2, 4, 6.5]", "0.99", "0.99 is not allowed.*from 1 up to", r"sampling\[1\].acceleration"),
    ("[2, 4, 6.5]", "[]", "one value or a list of at least one", r"sampling\[1\].acceleration"),
    ("[2, 4, 6.5]", "[2, 2.0]", "repeats a value", r"line 28, key sampling\[1\].acceleration"),
    ("acceleration = [2, 4, 6.5]\n", "", "'acceleration' is missing", r"sampling\[1\]"),
    ('"j"', '"k"', "i, k, k repeat one letter", "line 11, key grid"),
    ('"k"', '"z"', "'z' is not allowed.*one of 'i', 'j', 'k'", "grid.partition_axis"),
    ('partition_axis = "k"\n', "", "needs a partition axis", "grid"),
    ("-3d", "-2d", "has no partitions, but partition_axis", "grid.partition_axis"),
    ("phase_steps = 300", "slices = 3", "has partitions, but slices", "grid.slices"),
    ('[[recovery]]\nmethod = "wavelet"', "", r"no arms: no \[\[recovery\]\]", "knee.toml"),
    ('method = "wavelet"', "", "'method' is missing", r"line 32, key recovery\[1\].method"),
    ("[today]", "[[today]]", r"not a section.*headed \[today\]", "today"),
    ("[[recovery]]", "[recovery]", r"not a section.*headed \[\[recovery\]\]", "recovery"),
    ('"equispaced"', '"equispacd"', "Did you mean 'equispaced'", "today"),
    ('"equispaced"', "3", "a name in quotes or a table", "today.sampling"),
    ('"least-squares"', "{ mthod = 3 }", "a method in quotes, or a table", "today.recovery"),
    ("draws = 5", "slices = [1, 1]", "list of different plane indices", "study.slices"),
    ("draws = 5", "slices = 0", 'slices = 0 is not allowed.*"all"', "study.slices"),
    ("draws = 5", "snr = 20\nsigma_added = 1", "given 2 times: sigma_added, snr", "study.snr"),
    ("draws = 5", "echo_train_decay = true", "tissue_t2_ms is not given", "study.echo"),
    ('["knee.nii.gz"]', "[3]", "a path in quotes, or a table", r"study.scans\[1\]"),
    ('["knee.nii.gz"]', "[]", "at least one", "study.scans"),
    ('["knee.nii.gz"]', '[{ phase = "a" }]', "a table with magnitude and phase", "study.scans"),
    ('["knee.nii.gz"]', '[{ fase = "a" }]', "Did you mean 'phase'", r"scans\[1\].fase"),
    ("draws = 5", "draws = [5", "not valid TOML.*line 41", "knee.toml"),
    ("draws = 5", "draws = 5\ndraws = 6", "not valid TOML.*line 41", "knee.toml"),
    ("draws = 5", "draws = 5" + "0" * 5000, "not valid TOML", "knee.toml"),
]


@pytest.mark.parametrize(("old", "new", "says", "place"), REFUSED)
def test_what_is_refused_is_named_with_its_place(old, new, says, place):
    with pytest.raises(ProtocolError) as caught:
        from_text(changed(KNEE_3D, old, new), "knee.toml")
    error = caught.value
    assert re.search(says, f"{error.what} {error.fix}")
    assert error.where.startswith("knee.toml")
    assert re.search(place, error.where)
    assert error.fix


def test_no_arms():
    text = KNEE_3D[: KNEE_3D.index("[today]")] + KNEE_3D[KNEE_3D.index("[acceptance]") :]
    with pytest.raises(ProtocolError, match="no arms"):
        from_text(text)
    with pytest.raises(ProtocolError, match="Key 'scans' is missing"):
        from_text(KNEE_3D[: KNEE_3D.index("[study]")])


def test_two_entries_of_one_name():
    entry = '\n[[recovery]]\nmethod = "wavelet"\n'
    with pytest.raises(ProtocolError, match=r"Two \[\[recovery\]\] tables are called 'wavelet'"):
        from_text(KNEE_3D + entry)
    assert len(from_text(KNEE_3D + entry + 'name = "again"\n').recovery) == 2


def test_files_that_are_no_protocol(tmp_path):
    with pytest.raises(ProtocolError, match="cannot be read: No such file"):
        load_protocol(tmp_path / "none.toml")
    with pytest.raises(ProtocolError, match="cannot be read: Is a directory"):
        load_protocol(tmp_path)
    with pytest.raises(ProtocolError, match="cannot be read"):
        load_protocol("a\0b")
    binary = tmp_path / "scan.nii.gz"
    binary.write_bytes(b"\x1f\x8b\x08\xff" * 20)
    with pytest.raises(ProtocolError, match="not UTF-8 text"):
        load_protocol(binary)
    binary.write_bytes(b"#" * 1_000_001)
    with pytest.raises(ProtocolError, match="1000001 bytes"):
        load_protocol(binary)
    with pytest.raises(ProtocolError, match="nested too deeply"):
        from_text("a = " + "[" * 20000 + "]" * 20000)


def test_byte_order_mark_is_no_error(tmp_path):
    file = tmp_path / "knee.toml"
    file.write_bytes(b"\xef\xbb\xbf" + KNEE_3D.encode())
    assert load_protocol(file).text == KNEE_3D


def test_a_simulated_array():
    coils = from_text(KNEE_3D + '\n[coils]\nnumber = 12\nform = "dome"\nphase = 1.5\n').coils
    assert coils is not None
    assert (coils.number, coils.form, coils.phase, coils.rows) == (12, "dome", 1.5, 1)
    with pytest.raises(ProtocolError, match="one of 'cylinder', 'dome'"):
        from_text(KNEE_3D + '\n[coils]\nform = "bird cage"\n')
