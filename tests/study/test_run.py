"""A whole study on small scans: what it writes, and that every number follows from its units."""

import csv
import json
from pathlib import Path
from typing import Any

import nibabel
import numpy as np
import pytest
from small_study import AFFINE, PROTOCOL, small_object, write_small_study

from mrics.errors import ScanError, StudyError
from mrics.protocol import load_protocol
from mrics.quality import score
from mrics.scan import Axes
from mrics.study import plan_study, run_study
from mrics.study.units import draw_of


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict[str, Any]]:
    folder = tmp_path_factory.mktemp("study")
    protocol = write_small_study(folder)
    run_study(protocol, folder / "out")
    return folder, json.loads((folder / "out" / "results.json").read_text())


def test_results_hold_the_promised_keys(study: tuple[Path, dict[str, Any]]) -> None:
    _, results = study
    assert {"mrics", "schema", "protocol", "scans", "units", "arms", "timing"} <= set(results)
    assert results["schema"] == 1
    unit = results["units"][0]
    assert {"arm", "scan", "draw", "seed", "sigma", "weight", "certificate", "slices"} <= set(unit)
    assert {"index", "nrmse", "psnr", "ssim", "hfen"} <= set(unit["slices"][0])
    arm = results["arms"][0]
    assert {
        "id",
        "sampling",
        "recovery",
        "acceleration_target",
        "acceleration",
        "scan_time_s",
        "full_scan_time_s",
        "metrics",
        "verdict",
    } <= set(arm)
    assert {"mean", "min", "max", "interval", "worst", "worst_where"} <= set(
        arm["metrics"]["nrmse"]
    )
    assert "wall_s" not in json.dumps(results["units"]), "timings are kept apart"


def test_arms_draws_and_scans_are_all_there(study: tuple[Path, dict[str, Any]]) -> None:
    _, results = study
    assert [a["today"] for a in results["arms"]] == [True, False, False]
    # The regular pattern has one draw, the random ones two, each on two scans.
    assert len(results["units"]) == 2 * (1 + 2 + 2)


def test_every_arm_number_follows_from_the_units(study: tuple[Path, dict[str, Any]]) -> None:
    _, results = study
    for arm in results["arms"]:
        units = [u for u in results["units"] if u["arm"] == arm["id"]]
        for name, summary in arm["metrics"].items():
            per_scan = {}
            for unit in units:
                per_scan.setdefault(unit["scan"], []).append(
                    np.mean([s[name] for s in unit["slices"]])
                )
            mean = np.mean([np.mean(draws) for draws in per_scan.values()])
            every = [s[name] for unit in units for s in unit["slices"]]
            assert summary["mean"] == pytest.approx(mean, rel=1e-6)
            assert summary["min"] == pytest.approx(min(every), rel=1e-6)
            assert summary["max"] == pytest.approx(max(every), rel=1e-6)
            where = summary["worst_where"]
            [worst] = [
                s[name]
                for unit in units
                if (unit["scan"], unit["draw"]) == (where["scan"], where["draw"])
                for s in unit["slices"]
                if s["index"] == where["slice"]
            ]
            assert worst == pytest.approx(summary["worst"], rel=1e-6)


def test_maps_lie_on_the_scan_and_give_the_scores_back(
    study: tuple[Path, dict[str, Any]],
) -> None:
    folder, results = study
    maps = {(m["kind"], m["scan"], m["arm"]): folder / "out" / m["file"] for m in results["maps"]}
    arm = results["arms"][1]["id"]
    reference = nibabel.load(maps["reference", "object-0", None])
    recovered = nibabel.load(maps["recovered", "object-0", arm])
    error = nibabel.load(maps["error", "object-0", arm])
    body = nibabel.load(maps["body", "object-0", None]).get_fdata() > 0
    np.testing.assert_allclose(recovered.affine, AFFINE, atol=1e-6)
    assert recovered.header["descrip"].item() == b"mrics research only"
    np.testing.assert_allclose(reference.get_fdata(), np.abs(small_object(0)), rtol=1e-6)
    a, b = np.abs(np.asanyarray(recovered.dataobj)), reference.get_fdata()
    np.testing.assert_allclose(error.get_fdata(), a - b, atol=1e-4)
    unit = next(
        u for u in results["units"] if (u["arm"], u["scan"], u["draw"]) == (arm, "object-0", 0)
    )
    planes = Axes("i", "j").to_planes
    for part in unit["slices"]:
        index = part["index"]
        inside = planes(body)[index]
        gap = (planes(a)[index] - planes(b)[index])[inside]
        assert part["nrmse"] == pytest.approx(
            np.linalg.norm(gap) / np.linalg.norm(planes(b)[index][inside]), rel=1e-4
        )


def test_the_pattern_image_is_the_pattern(study: tuple[Path, dict[str, Any]]) -> None:
    folder, results = study
    plan = plan_study(load_protocol(folder / "protocol.toml"))
    for row in plan.rows:
        file = next(
            m["file"] for m in results["maps"] if (m["kind"], m["arm"]) == ("pattern", row.arm.id)
        )
        mask = nibabel.load(folder / "out" / file).get_fdata()[:, 0, 0] > 0
        drawn = draw_of(plan.protocol, row.arm, plan.scan_ids[0], (40,), 0)
        np.testing.assert_array_equal(mask, drawn.pattern.mask)
        hashes = {u["pattern_hash"] for u in results["units"] if u["arm"] == row.arm.id}
        assert row.pattern.hash in hashes


def test_scans_have_draws_of_their_own_and_arms_share_them(
    study: tuple[Path, dict[str, Any]], tmp_path: Path
) -> None:
    _, results = study
    random = [u for u in results["units"] if u["arm"].startswith("power-law")]
    hashes: dict[str, set[str]] = {}
    for unit in random:
        hashes.setdefault(unit["arm"], set()).add(unit["pattern_hash"])
    assert all(len(found) == 4 for found in hashes.values()), "2 scans x 2 draws, all different"
    regular = {u["pattern_hash"] for u in results["units"] if u["arm"].startswith("today")}
    assert len(regular) == 1
    text = PROTOCOL.replace("[acceptance]", '[[recovery]]\nmethod = "least-squares"\n[acceptance]')
    both = run_study(write_small_study(tmp_path, protocol=text), tmp_path / "out")
    drawn: dict[tuple[str, int, float], set[str]] = {}
    for unit in both["units"]:
        if not unit["arm"].startswith("today"):
            key = (unit["scan"], unit["draw"], unit["acceleration"])
            drawn.setdefault(key, set()).add(unit["pattern_hash"])
    assert all(len(found) == 1 for found in drawn.values()), "recoveries see the same patterns"


def test_the_table_holds_every_slice(study: tuple[Path, dict[str, Any]]) -> None:
    folder, results = study
    rows = list(csv.DictReader((folder / "out" / "results.csv").read_text().splitlines()))
    slices = [(u, s) for u in results["units"] for s in u["slices"]]
    assert len(rows) == len(slices)
    for row, (unit, part) in zip(rows, slices, strict=True):
        assert row["arm"] == unit["arm"]
        assert float(row["ssim"]) == part["ssim"]


def test_no_path_of_this_machine_is_written(study: tuple[Path, dict[str, Any]]) -> None:
    folder, _ = study
    for path in (folder / "out").rglob("*.json"):
        assert str(folder) not in path.read_text()


def test_running_again_computes_nothing_new(study: tuple[Path, dict[str, Any]]) -> None:
    folder, results = study
    seen: list[tuple[int, int, str]] = []
    run_study(folder / "protocol.toml", folder / "out", progress=lambda *a: seen.append(a))
    assert seen == [(10, 10, "")]
    again = json.loads((folder / "out" / "results.json").read_text())
    assert {k: v for k, v in again.items() if k != "timing"} == {
        k: v for k, v in results.items() if k != "timing"
    }


def test_a_unit_whose_map_is_gone_runs_again(study: tuple[Path, dict[str, Any]]) -> None:
    folder, results = study
    gone = next(m for m in results["maps"] if m["kind"] == "recovered")
    (folder / "out" / gone["file"]).unlink()
    seen: list[tuple[int, int, str]] = []
    run_study(folder / "protocol.toml", folder / "out", progress=lambda *a: seen.append(a))
    assert [s[0] for s in seen] == [9, 10]
    assert (folder / "out" / gone["file"]).is_file()


def test_processes_give_the_same_numbers(
    study: tuple[Path, dict[str, Any]], tmp_path: Path
) -> None:
    folder, results = study
    other = run_study(folder / "protocol.toml", tmp_path / "pool", workers=2)
    assert other["units"] == results["units"]
    assert other["arms"] == results["arms"]


def test_another_protocol_is_refused_without_force(
    study: tuple[Path, dict[str, Any]], tmp_path: Path
) -> None:
    folder, results = study
    changed = folder / "changed.toml"
    changed.write_text(PROTOCOL.replace("acceleration = [2, 3]", "acceleration = [3, 4]"))
    with pytest.raises(StudyError, match="another protocol"):
        run_study(changed, folder / "out")
    assert json.loads((folder / "out" / "results.json").read_text())["units"] == results["units"]
    # A comment does not make another protocol.
    commented = folder / "commented.toml"
    commented.write_text("# a remark\n" + PROTOCOL)
    run_study(commented, folder / "out")
    seen: list[tuple[int, int, str]] = []
    run_study(changed, folder / "out", force=True, progress=lambda *a: seen.append(a))
    assert seen[0][:2] == (6, 10), "R = 3 and today's arm were there already"
    run_study(folder / "protocol.toml", folder / "out", force=True)


def test_a_folder_that_is_no_study_is_left_alone(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path / "in", scans=1)
    (tmp_path / "mine").mkdir()
    (tmp_path / "mine" / "letter.txt").write_text("keep")
    for force in (False, True):
        with pytest.raises(StudyError, match="is not a study"):
            run_study(protocol, tmp_path / "mine", force=force)
    assert [p.name for p in (tmp_path / "mine").iterdir()] == ["letter.txt"]
    with pytest.raises(StudyError, match="is a file"):
        run_study(protocol, tmp_path / "mine" / "letter.txt")


def test_a_bad_scan_stops_the_study_before_anything_is_written(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=2)
    data = small_object(1)
    data[3, 2, 1] = np.nan
    nibabel.save(nibabel.Nifti1Image(data, AFFINE), tmp_path / "object_1.nii.gz")
    with pytest.raises(ScanError, match=r"1 .*voxel"):
        run_study(protocol, tmp_path / "out")
    assert not (tmp_path / "out").exists()


def test_quick_studies_few_slices_and_says_so(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=1, protocol=PROTOCOL + "quick_slices = 2\n")
    results = run_study(protocol, tmp_path / "out", quick=True)
    assert len(results["scans"][0]["planes"]) == 2
    assert all(len(u["slices"]) == 2 for u in results["units"])
    assert any("part of the slices" in note for note in results["notes"])


def test_added_noise_reaches_the_level_asked_for(tmp_path: Path) -> None:
    text = PROTOCOL + "snr = 20.0\n"
    protocol = write_small_study(tmp_path, scans=1, protocol=text)
    results = run_study(protocol, tmp_path / "out")
    scan = results["scans"][0]
    unit = results["units"][0]
    assert unit["sigma"] == pytest.approx(scan["snr"] * scan["sigma"] / 20.0, rel=1e-4)
    assert len({u["draw"] for u in results["units"] if u["arm"].startswith("today")}) == 2


def test_scores_are_those_of_the_public_function(study: tuple[Path, dict[str, Any]]) -> None:
    folder, results = study
    maps = {(m["kind"], m["scan"], m["arm"]): folder / "out" / m["file"] for m in results["maps"]}
    arm = results["arms"][2]["id"]
    recovered = np.asanyarray(nibabel.load(maps["recovered", "object-1", arm]).dataobj)
    body = nibabel.load(maps["body", "object-1", None]).get_fdata() > 0
    planes = Axes("i", "j").to_planes
    reference = small_object(1)
    whole = np.abs(reference)[body].max()
    unit = next(
        u for u in results["units"] if (u["arm"], u["scan"], u["draw"]) == (arm, "object-1", 0)
    )
    part = unit["slices"][2]
    index = part["index"]
    mine = score(planes(recovered)[index], planes(reference)[index], planes(body)[index])
    assert part["nrmse"] == pytest.approx(mine["nrmse"], rel=1e-4)
    assert part["hfen"] == pytest.approx(mine["hfen"], rel=1e-4)
    # PSNR refers to the largest value of the whole volume, not of the slice.
    own = np.abs(planes(reference)[index])[planes(body)[index]].max()
    assert part["psnr"] == pytest.approx(mine["psnr"] + 20 * np.log10(whole / own), abs=1e-3)
