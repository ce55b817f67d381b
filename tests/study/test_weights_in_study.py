"""Weights in a study: how they were chosen, against the answer, and trained on other scans."""

import json
import shutil
from pathlib import Path
from typing import Any

import pytest
from small_study import PROTOCOL, write_small_study

from mrics.errors import ProtocolError
from mrics.protocol import load_protocol
from mrics.recovery import recover
from mrics.study import run_study
from mrics.study.plan import plan_study
from mrics.study.units import acquire

RECOVERIES = """\
[[recovery]]
name = "own"
method = "variation"
[[recovery]]
name = "answer"
method = "variation"
weight = "best"
[[recovery]]
name = "trained"
method = "variation"
weight = "trained"
"""


def write(folder: Path) -> Path:
    text = PROTOCOL.replace('[[recovery]]\nmethod = "zero-filled"\n', RECOVERIES)
    text = text.replace("acceleration = [2, 3]", "acceleration = 3").replace(
        "draws = 2", "draws = 1"
    )
    text += 'snr = 8\nslices = 2\ntraining_scans = "training/*.nii.gz"\n'
    path = write_small_study(folder, protocol=text, shape=(44, 40, 4))
    (folder / "training").mkdir()
    shutil.move(folder / "object_1.nii.gz", folder / "training" / "object_1.nii.gz")
    return path


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict[str, Any]]:
    folder = tmp_path_factory.mktemp("weights")
    path = write(folder)
    run_study(path, folder / "out")
    return path, json.loads((folder / "out" / "results.json").read_text())


def unit_of(results: dict[str, Any], name: str) -> dict[str, Any]:
    [unit] = [u for u in results["units"] if u["arm"].endswith(name)]
    return unit


def test_rules_are_named_in_units_and_arms(study: tuple[Path, dict[str, Any]]) -> None:
    _, results = study
    rules = {
        name: unit_of(results, name)["certificate"]["weight_rule"]
        for name in ("own", "answer", "trained")
    }
    assert rules["own"].startswith("auto: held-out samples and misfit, ")
    assert rules["answer"].startswith("best: chosen with the answer in hand, ")
    assert rules["trained"].startswith("trained: on object-1, ")
    arms = {arm["recovery_name"]: arm for arm in results["arms"] if not arm["today"]}
    weight = unit_of(results, "own")["weight"]
    assert arms["own"]["weight"] == f"{weight:.3g} sigma (auto: held-out samples and misfit)"
    assert arms["answer"]["weight"].endswith("sigma (best: chosen with the answer in hand)")
    [note] = [text for text in results["notes"] if "answer in hand" in text]
    assert "answer" in note
    assert "trained" not in note


def test_no_arm_beats_the_answer(study: tuple[Path, dict[str, Any]]) -> None:
    _, results = study
    error = {
        name: sum(part["nrmse"] ** 2 for part in unit_of(results, name)["slices"])
        for name in ("own", "answer", "trained")
    }
    assert error["answer"] <= 1.01 * min(error.values())


def test_a_trained_weight_is_the_best_of_the_training_scans(
    study: tuple[Path, dict[str, Any]],
) -> None:
    path, results = study
    plan = plan_study(load_protocol(path)).on_training_scans()
    [row] = [row for row in plan.rows if row.arm.recovery_name == "trained"]
    scan = plan.prepared(0)
    [unit] = plan.units(path.parent, [scan.scan.sha256], [row], 1)
    _, acquisition = acquire(unit, scan)
    best = recover(acquisition, "variation", weight="best", reference=scan.stack, mask=scan.body)
    # The study averages PSNR over scans, so that its search sees the logarithm of the error.
    assert unit_of(results, "trained")["weight"] == pytest.approx(best.certificate.weight, rel=0.03)


def test_training_is_kept_in_the_ledger(
    study: tuple[Path, dict[str, Any]], monkeypatch: pytest.MonkeyPatch
) -> None:
    path, results = study

    def refuse(*_: object) -> None:
        raise AssertionError("trained again")

    monkeypatch.setattr("mrics.study.trained_weights.search_weight", refuse)
    again = run_study(path, path.parent / "out")
    assert unit_of(again, "trained")["weight"] == unit_of(results, "trained")["weight"]


def test_trained_weights_need_other_scans(tmp_path: Path) -> None:
    path = write(tmp_path)
    text = path.read_text()
    path.write_text(text.replace('training_scans = "training/*.nii.gz"\n', ""))
    with pytest.raises(ProtocolError, match=r"(?s)needs scans to train on.*weight.*training_scans"):
        load_protocol(path)
    path.write_text(text.replace("training/*", "object_0"))
    with pytest.raises(ProtocolError, match="is a training scan and is studied too"):
        plan_study(load_protocol(path))
    path.write_text(text.replace("training/*", "nowhere_*"))
    with pytest.raises(ProtocolError, match="nowhere"):
        plan_study(load_protocol(path))
