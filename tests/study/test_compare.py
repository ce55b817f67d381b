"""Two studies side by side."""

from pathlib import Path

import pytest
from small_study import PROTOCOL, write_small_study

from mrics.errors import StudyError
from mrics.study import compare_studies, run_study


def test_what_changed_and_what_moved(tmp_path: Path) -> None:
    one = write_small_study(tmp_path / "one")
    changed = PROTOCOL.replace("[2, 3]", "[2, 4]").replace("seed = 7", "seed = 8")
    two = write_small_study(tmp_path / "two", scans=1, protocol=changed)
    run_study(one, tmp_path / "a")
    run_study(two, tmp_path / "b")
    found = compare_studies(tmp_path / "a", tmp_path / "b")
    assert {c.key: (c.before, c.after) for c in found.changes} == {
        "sampling[1].acceleration": ([2.0, 3.0], [2.0, 4.0]),
        "study.seed": (7, 8),
    }
    assert found.only_before == ("power-law-r3-zero-filled",)
    assert found.only_after == ("power-law-r4-zero-filled",)
    assert [c.key for c in found.scans] == ["object-1"]
    moved = {(m.arm, m.metric) for m in found.moves}
    assert ("power-law-r2-zero-filled", "nrmse") in moved
    same = compare_studies(tmp_path / "a", tmp_path / "a")
    assert (same.changes, same.moves, same.verdicts, same.scans) == ((), (), (), ())


def test_intervals_that_do_not_overlap_are_told(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path)
    run_study(protocol, tmp_path / "a")
    noisy = tmp_path / "noisy.toml"
    noisy.write_text(PROTOCOL + "snr = 4.0\n")
    run_study(noisy, tmp_path / "b")
    moves = compare_studies(tmp_path / "a", tmp_path / "b").moves
    assert any(m.beyond for m in moves if m.metric == "psnr")


def test_a_folder_without_results_is_refused(tmp_path: Path) -> None:
    with pytest.raises(StudyError, match="no finished study"):
        compare_studies(tmp_path, tmp_path)
