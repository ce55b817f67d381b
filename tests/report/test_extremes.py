"""Studies at the edge: huge and tiny values, values that are not finite, large grids, one slice."""

import json
import shutil
from pathlib import Path
from typing import Any

import nibabel
import numpy as np
import pytest
from browsing import Page
from study_building import StudyPlan, build_study, read_results

from mrics.report import write_document, write_figures, write_report

ONE_ARM = {"scans": 1, "draws": 1, "arms": ((2.0, "windowed"),)}


def reference_of(folder: Path) -> tuple[Path, Any]:
    entry = next(m for m in read_results(folder)["maps"] if m["kind"] == "reference")
    return folder / entry["file"], nibabel.load(folder / entry["file"])


def grey_levels(page: Page, values: Any) -> Any:
    """Grey levels that the page should show of a plane with i across planes, k up, j across."""
    facts = json.loads(page.script("return document.getElementById('study-data').textContent"))
    scan = facts["scans"][0]
    low, high = scan["window"]
    lattice = np.rint(values.astype(np.float64) / scan["step"]) * scan["step"]
    return np.clip(np.round((lattice - low) / (high - low) * 255), 0, 255)


@pytest.mark.browser
@pytest.mark.parametrize(
    ("shape", "scale"),
    [
        ((1, 64, 64), 1e-30),
        ((1, 64, 64), 1e30),
        ((1, 1024, 1024), 1.0),
    ],
)
def test_pixels_are_right_at_any_scale_and_size(
    browser: Any, tmp_path: Path, shape: tuple[int, int, int], scale: float
) -> None:
    folder = build_study(tmp_path, StudyPlan(shape=shape, **ONE_ARM))
    rescale(folder, scale / 1000)
    path = write_report(folder)
    assert path.stat().st_size < 25e6
    page = Page(browser, path)
    assert page.errors() == []
    plane = np.abs(np.asarray(reference_of(folder)[1].dataobj)[0]).T[::-1]
    step = max(1, shape[1] // 128)
    plane = plane[step // 2 :: step, step // 2 :: step]
    seen = page.pixels(0, *plane.shape)[..., 0].astype(int)
    assert np.abs(seen - grey_levels(page, plane)).max() <= 1
    text = page.script("return document.getElementById('v-grey-ends').textContent")
    high = float(text.split(" to ")[1].replace("−", "-"))
    assert high == pytest.approx(page_window(page), rel=0.01)


def page_window(page: Page) -> float:
    facts = json.loads(page.script("return document.getElementById('study-data').textContent"))
    return float(facts["scans"][0]["window"][1])


def rescale(folder: Path, factor: float) -> None:
    """Multiply the stored images: the report never computes with anything else."""
    for entry in read_results(folder)["maps"]:
        if entry["kind"] in ("reference", "recovered", "error"):
            image = nibabel.load(folder / entry["file"])
            data = np.asarray(image.dataobj) * np.array(factor, dtype=np.float64)
            kind = np.complex64 if np.iscomplexobj(data) else np.float32
            nibabel.save(
                nibabel.Nifti1Image(data.astype(kind), image.affine), folder / entry["file"]
            )
    results = read_results(folder)
    results["scans"][0]["data_range"] *= factor
    (folder / "results.json").write_text(json.dumps(results))


@pytest.fixture
def own_study(tiny_study: Path, tmp_path: Path) -> Path:
    return Path(shutil.copytree(tiny_study, tmp_path / "study"))


def test_values_that_are_not_finite_are_counted_and_named(own_study: Path) -> None:
    path, image = reference_of(own_study)
    data = np.asarray(image.dataobj).copy()
    data[1, 4, 5:8] = np.nan
    data[1, 9, 9] = np.inf
    nibabel.save(nibabel.Nifti1Image(data, image.affine), path)
    page = write_report(own_study).read_text()
    assert f"<code>maps/{path.name}</code> (4 values)" in page


def test_scores_that_are_not_finite_are_drawn_as_missing(own_study: Path) -> None:
    results = read_results(own_study)
    for row in results["units"][1]["slices"]:
        row["psnr"] = float("nan")
    results["units"][1]["slices"][0]["ssim"] = float("inf")
    for arm in results["arms"]:
        arm["metrics"]["psnr"] |= {"mean": float("inf"), "max": float("inf"), "interval": None}
    (own_study / "results.json").write_text(json.dumps(results))
    page = write_report(own_study).read_text()
    data = page.split('id="study-data">')[1].split("</script>")[0]
    json.loads(data, parse_constant=pytest.fail)


def test_one_slice_has_document_and_figures(tmp_path: Path) -> None:
    folder = build_study(tmp_path, StudyPlan(shape=(1, 64, 48), **ONE_ARM))
    assert write_document(folder).is_file()
    assert len(write_figures(folder)) == 2 * 4


def test_reference_or_mask_that_is_gone_is_named(own_study: Path) -> None:
    gone = [
        entry["file"]
        for entry in read_results(own_study)["maps"]
        if entry["kind"] in ("reference", "body") and entry["scan"] == "scan-1"
    ]
    for name in gone:
        (own_study / name).unlink()
    page = write_report(own_study).read_text()
    assert len(gone) == 2
    assert all(f"<code>{name}</code>" in page for name in gone)
