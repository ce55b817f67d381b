"""Inserted features in the viewer of a real study: sites, pixels, keys."""

import json
from pathlib import Path
from typing import Any

import nibabel
import numpy as np
import pytest
from browsing import Page, faults
from small_study import PROTOCOL, write_small_study
from study_building import read_results

from mrics.quality.features import Feature
from mrics.report import run_study
from mrics.report.arms import windows
from mrics.report.folder import open_folder
from mrics.report.inserted import inserted_features, reference_change
from mrics.report.pictures import load_pictures
from mrics.report.viewer_data import viewer_values

FEATURES = """\
[quality]
more_scores = false
error_split = false
planes = 2
features = [{ shape = "disc", size_mm = [4.0, 7.0], contrast = -40 }]
feature_sites = 3
"""


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("features")
    path = write_small_study(folder / "in", scans=1, protocol=PROTOCOL + FEATURES)
    run_study(path, folder / "out")
    return folder / "out"


def volume(study: Path, kind: str, arm: str | None) -> Any:
    entry = next(
        m
        for m in read_results(study)["maps"]
        if (m["kind"], m["arm"]) == (kind, arm) and not m["draw"]
    )
    return np.asarray(nibabel.load(study / entry["file"]).dataobj)


def test_sites_and_heights_put_the_feature_where_the_study_did(study: Path) -> None:
    """At the site the reference changes by the height of the feature, elsewhere by nothing."""
    folder = open_folder(study)
    scan = folder.scans[0]
    found = inserted_features(folder, scan["id"])
    arms = len(read_results(study)["arms"])
    assert len(found) == 2 * arms
    for one in found:
        assert one.label == f"disc {one.feature.size_mm:.1f} mm, −40 %"
        change = reference_change(folder, one, one.places)
        for site, height in zip(one.sites, one.heights, strict=True):
            at = (one.places.index(site.place), site.row, site.column)
            assert change[at] == pytest.approx(height, rel=0.3)
            assert change[at] < 0
        patch = one.feature.patch((3.0, 1.2, 1.0))
        assert change.sum() == pytest.approx(patch.sum() * sum(one.heights), rel=1e-3)


def test_study_without_features_has_none(tiny_study: Path) -> None:
    assert inserted_features(open_folder(tiny_study), "scan-1") == []


def test_slices_with_features_are_kept_where_room_is_short(study: Path) -> None:
    """With room for some slices, the worst, the median and those with features are there."""
    folder = open_folder(study)
    pictures = load_pictures(folder)
    whole = viewer_values(folder, pictures, windows(folder, pictures), 10_000_000)
    assert whole is not None
    assert whole["left_out"] == []
    wanted = {pictures[0].places[p] for p in pictures[0].important}
    assert wanted >= {place for one in pictures[0].features for place in one.places}
    assert len(wanted) < len(pictures[0].places)
    size = sum(len(text) for text in whole["blocks"].values())
    for share in (0.4, 0.35, 0.3, 0.25, 0.2, 0.15, 0.1):
        values = viewer_values(folder, pictures, windows(folder, pictures), int(share * size))
        assert values is not None
        scan = values["data"]["scans"][0]
        held = {(s["frame"], s["plane"]) for s in scan["slices"]}
        if len(held) < len(pictures[0].places):
            assert f"{len(held)} of 5 slices are in this page" in values["left_out"][0]
            assert "inserted features" in values["left_out"][0]
            assert held <= wanted or wanted <= held
            break
    else:
        pytest.fail("no slice was left out")


@pytest.mark.browser
def test_viewer_jumps_to_every_site_and_shows_the_feature(browser: Any, study: Path) -> None:
    page = Page(browser, study / "report.html")
    facts = json.loads(page.script("return document.getElementById('study-data').textContent"))
    scan = facts["scans"][0]
    arm = page.script("return document.getElementById('v-arm').value")
    plain = volume(study, "reference", None), np.abs(volume(study, "recovered", arm))
    results = read_results(study)
    unit = next(u for u in results["units"] if u["arm"] == arm and u["draw"] == 0)
    for number, row in enumerate(unit["measures"]["features"], start=1):
        page.choose("#v-feature", number)
        change = np.nan_to_num(volume(study, f"feature_{number}", arm))
        patch = Feature(row["shape"], row["nominal_mm"], row["contrast"]).patch((3.0, 1.2, 1.0))[0]
        for count, placed in enumerate(row["placed"]):
            index = unit["slices"][placed["plane"]]["index"]
            assert page.painted().split()[1] == str(
                [s["plane"] for s in scan["slices"]].index(index)
            )
            text = page.one("#v-site-text").text
            assert text.startswith(f"{round(100 * placed['retained'])} % of its contrast kept here")
            assert f"site {count + 1} of {len(row['placed'])}" in text
            assert page.script("return document.querySelectorAll('.ring.at').length") == 3
            page.keys("f")
        page.keys("0")
        where = page.painted().split()[1]
        index = scan["slices"][int(where)]["plane"]
        # Phase (j, u) and readout (i, v): the page has i to the right and j upwards.
        added = np.zeros(plain[0].shape[1::-1])
        for placed in row["placed"]:
            if unit["slices"][placed["plane"]]["index"] == index:
                half = [n // 2 for n in patch.shape]
                box = tuple(
                    slice(placed[a] - h, placed[a] + h + 1) for a, h in zip("uv", half, strict=True)
                )
                added[box] += placed["height"] * patch
        low, high = scan["window"]
        for panel, expected in (
            (0, plain[0][:, :, index].T + added),
            (1, plain[1][:, :, index].T + change[:, :, index].T),
        ):
            lattice = np.maximum(0, expected[::-1]) - low
            grey = np.clip(np.round(lattice / (high - low) * 255), 0, 255)
            seen = page.pixels(panel, *grey.shape)[..., 0].astype(int)
            assert np.abs(seen - grey).max() <= 1
    assert faults(page) == []
    page.choose("#v-feature", 0)
    assert page.script("return document.querySelectorAll('.ring').length") == 0
    assert page.errors() == []
