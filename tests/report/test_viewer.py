"""The viewer in a real browser, against the stored maps read here by nibabel alone."""

import json
import re
from pathlib import Path
from typing import Any

import nibabel
import numpy as np
import pytest
from browsing import Page
from study_building import StudyPlan, build_study, read_results

from mrics.report import write_report
from mrics.report.colours import one_signed_table, signed_table

pytestmark = pytest.mark.browser

UP, DOWN, RIGHT, SHIFT, HOME, END, SPACE, TAB = (
    "\ue013",
    "\ue015",
    "\ue014",
    "\ue008",
    "\ue011",
    "\ue010",
    " ",
    "\ue004",
)


class Truth:
    """Maps of the small study as a reader with a voxel viewer would see them.

    The affine runs i to the left, j to the back and k up, planes are numbered along i: a plane
    seen with the front on the left and the head on top has k up and j to the right.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.results = read_results(folder)

    def plane(self, kind: str, index: int, scan: str = "scan-1", arm: str | None = None) -> Any:
        entry = next(
            m
            for m in self.results["maps"]
            if (m["kind"], m["scan"], m["arm"]) == (kind, scan, arm) and not m["draw"]
        )
        volume = np.asarray(nibabel.load(self.folder / entry["file"]).dataobj)
        return np.abs(volume[index]).T[::-1] if kind != "error" else volume[index].T[::-1]


@pytest.fixture(scope="module")
def truth(small_study: Path) -> Truth:
    return Truth(small_study)


@pytest.fixture
def page(browser: Any, small_page: Path) -> Page:
    return Page(browser, small_page)


def facts(page: Page) -> dict[str, Any]:
    return json.loads(page.script("return document.getElementById('study-data').textContent"))


def grey_of(values: Any, step: float, low: float, high: float) -> Any:
    lattice = np.rint(values / np.float32(step)) * step
    return np.clip(np.round((lattice - low) / (high - low) * 255), 0, 255)


def close(seen: Any, expected: Any) -> bool:
    """Equal grey levels, one apart where a value falls on the edge between two."""
    return bool(np.abs(seen[..., 0].astype(int) - expected).max() <= 1)


def arm_ids(truth: Truth) -> list[str]:
    return [arm["id"] for arm in truth.results["arms"]]


def test_opens_from_disk_without_network_and_without_complaint(page: Page) -> None:
    assert page.errors() == []
    loaded = page.script("return performance.getEntriesByType('resource').map((r) => r.name)")
    assert [name for name in loaded if not name.startswith(("data:", "blob:"))] == []


def test_first_view_is_the_worst_slice_of_a_candidate(page: Page, truth: Truth) -> None:
    chosen = page.script("return document.getElementById('v-arm').value")
    assert chosen != arm_ids(truth)[0]
    unit = next(
        u
        for u in truth.results["units"]
        if (u["arm"], u["scan"], u["draw"]) == (chosen, "scan-1", 0)
    )
    scored = [s for s in unit["slices"] if s["ssim"] is not None]
    worst = min(scored, key=lambda s: s["ssim"])["index"]
    assert page.painted() == f"scan-1 {worst} side 0"


def test_side_by_side_shows_the_stored_maps(page: Page, truth: Truth) -> None:
    scan = facts(page)["scans"][0]
    low, high = scan["window"]
    arm = page.script("return document.getElementById('v-arm').value")
    for move, index in ((HOME, 0), (UP, 1), (UP, 2), (END, 4), (DOWN, 3)):
        assert page.keys(move).split()[1] == str(index)
        reference = truth.plane("reference", index)
        recovered = truth.plane("recovered", index, arm=arm)
        shape = reference.shape
        step = scan["step"]
        assert close(page.pixels(0, *shape), grey_of(reference, step, low, high))
        assert close(page.pixels(1, *shape), grey_of(recovered, step, low, high))
        end = (high - low) / facts(page)["factor"]
        error = truth.plane("error", index, arm=arm)
        place = np.clip(np.round(127 + 127 * error / end), 0, 254).astype(int)
        slack = int(np.ceil(127 * step / end)) + 1
        table = signed_table().astype(int)
        near = np.min(
            [
                np.abs(page_colours - table[np.clip(place + d, 0, 254)]).max(axis=-1)
                for page_colours in [page.pixels(2, *shape).astype(int)]
                for d in range(-slack, slack + 1)
            ],
            axis=0,
        )
        assert near.max() == 0


def test_slider_and_wheel_change_the_slice(page: Page) -> None:
    assert page.choose("#v-slice", 3).split()[1] == "3"
    page.script(
        "document.querySelector('#v-stage canvas').dispatchEvent(new WheelEvent('wheel',"
        "{deltaY: 100, bubbles: true, cancelable: true}))"
    )
    assert page.painted().split()[1] == "4"
    at_end = page.script(
        "const e = new WheelEvent('wheel', {deltaY: 100, bubbles: true, cancelable: true});"
        "document.querySelector('#v-stage canvas').dispatchEvent(e); return e.defaultPrevented"
    )
    assert at_end is False


def test_alternate_shows_reference_then_arms_in_place(page: Page, truth: Truth) -> None:
    arm, other = arm_ids(truth)[1], arm_ids(truth)[3]
    page.choose("#v-arm", arm)
    page.choose("#v-other", other)
    scan = facts(page)["scans"][0]
    page.keys(HOME, UP, "2")
    assert page.script("return document.querySelectorAll('#v-stage canvas').length") == 1
    for kind, which in (("reference", None), ("recovered", arm), ("recovered", other)):
        expected = truth.plane(kind, 1, arm=which)
        seen = page.pixels(0, *expected.shape)
        assert close(seen, grey_of(expected, scan["step"], *scan["window"]))
        page.keys(SPACE)


def test_swipe_shows_one_image_on_each_side_of_the_edge(page: Page, truth: Truth) -> None:
    arm = arm_ids(truth)[3]
    page.choose("#v-arm", arm)
    scan = facts(page)["scans"][0]
    page.keys(HOME, UP, UP, "3")
    for presses, share in ((0, 0.5), (10, 0.7)):
        page.keys(*[RIGHT] * presses)
        left, right = truth.plane("reference", 2), truth.plane("recovered", 2, arm=arm)
        edge = round(share * left.shape[1])
        seen = page.pixels(0, *left.shape)
        window = (scan["step"], *scan["window"])
        assert close(seen[:, : edge - 1], grey_of(left, *window)[:, : edge - 1])
        assert close(seen[:, edge + 1 :], grey_of(right, *window)[:, edge + 1 :])


def test_error_on_image_tints_where_the_error_is(page: Page, truth: Truth) -> None:
    arm = arm_ids(truth)[3]
    page.choose("#v-arm", arm)
    page.choose("#v-factor", 10)
    page.keys(HOME, UP, UP, "4")
    error = truth.plane("error", 2, arm=arm)
    colours = page.pixels(0, *error.shape).astype(int)
    scan = facts(page)["scans"][0]
    end = (scan["window"][1] - scan["window"][0]) / 10
    warm = colours[..., 0] - colours[..., 2]
    assert (warm[error > end] > 100).all()
    assert (warm[error < -end] < -100).all()
    assert (np.abs(warm[np.abs(error) < 0.02 * end]) < 12).all()


def test_window_entry_and_keys_change_both_images_alike(page: Page, truth: Truth) -> None:
    scan = facts(page)["scans"][0]
    arm = page.script("return document.getElementById('v-arm').value")
    page.keys(HOME, UP)
    page.choose("#v-low", 200)
    page.choose("#v-high", 600)
    for panel, kind, which in ((0, "reference", None), (1, "recovered", arm)):
        expected = truth.plane(kind, 1, arm=which)
        assert close(page.pixels(panel, *expected.shape), grey_of(expected, scan["step"], 200, 600))
    page.keys("[")
    width = page.script(
        "return document.getElementById('v-high').valueAsNumber"
        " - document.getElementById('v-low').valueAsNumber"
    )
    assert width == pytest.approx(320, abs=1)
    page.choose("#v-preset", "body")
    expected = truth.plane("reference", 1)
    assert close(page.pixels(0, *expected.shape), grey_of(expected, scan["step"], *scan["window"]))


def test_dragging_changes_the_window_and_shift_drag_does_not(page: Page) -> None:
    from selenium.webdriver.common.action_chains import ActionChains

    canvas = page.one("#v-stage canvas")
    before = page.script("return document.getElementById('v-high').valueAsNumber")
    ActionChains(page.browser).move_to_element(canvas).click_and_hold().move_by_offset(
        60, 0
    ).release().perform()
    page.painted()
    after = page.script("return document.getElementById('v-high').valueAsNumber")
    assert after > before * 1.05
    page.keys("+", "+")
    ActionChains(page.browser).key_down(SHIFT).move_to_element(
        canvas
    ).click_and_hold().move_by_offset(40, 0).release().key_up(SHIFT).perform()
    page.painted()
    assert page.script("return document.getElementById('v-high').valueAsNumber") == after


def test_zoom_is_linked_and_keeps_the_pixels(page: Page, truth: Truth) -> None:
    scan = facts(page)["scans"][0]
    arm = page.script("return document.getElementById('v-arm').value")
    page.keys(HOME, UP, UP)
    for _ in range(2):
        page.one("#v-zoom-in").click()
    page.painted()
    zoom = 2.25
    for panel, kind, which in ((0, "reference", None), (1, "recovered", arm)):
        whole = grey_of(truth.plane(kind, 2, arm=which), scan["step"], *scan["window"])
        rows, columns = whole.shape
        seen = page.pixels(panel, 40, 40)[..., 0].astype(int)
        r = np.floor(rows / 2 - rows / zoom / 2 + (np.arange(40) + 0.5) * rows / zoom / 40)
        c = np.floor(columns / 2 - columns / zoom / 2 + (np.arange(40) + 0.5) * columns / zoom / 40)
        expected = whole[np.ix_(r.astype(int), c.astype(int))]
        assert (np.abs(seen - expected) <= 1).mean() > 0.97


def test_moving_a_zoomed_image_moves_every_panel(page: Page, truth: Truth) -> None:
    from selenium.webdriver.common.action_chains import ActionChains

    scan = facts(page)["scans"][0]
    arm = page.script("return document.getElementById('v-arm').value")
    page.keys(HOME, UP, UP, "+", "+")
    canvas = page.one("#v-stage canvas")
    width = page.script("return arguments[0].getBoundingClientRect().width", canvas)
    ActionChains(page.browser).key_down(SHIFT).move_to_element(
        canvas
    ).click_and_hold().move_by_offset(60, 0).release().key_up(SHIFT).perform()
    page.painted()
    zoom = 2.25
    for panel, kind, which in ((0, "reference", None), (1, "recovered", arm)):
        whole = grey_of(truth.plane(kind, 2, arm=which), scan["step"], *scan["window"])
        rows, columns = whole.shape
        seen = page.pixels(panel, 40, 40)[..., 0].astype(int)
        middle = columns * (0.5 - 60 / width / zoom)
        r = np.floor(rows / 2 - rows / zoom / 2 + (np.arange(40) + 0.5) * rows / zoom / 40)
        c = np.floor(middle - columns / zoom / 2 + (np.arange(40) + 0.5) * columns / zoom / 40)
        expected = whole[np.ix_(r.astype(int), c.astype(int))]
        assert (np.abs(seen - expected) <= 1).mean() > 0.93


def test_worst_and_median_buttons_go_where_the_results_say(page: Page, truth: Truth) -> None:
    arm = arm_ids(truth)[3]
    page.choose("#v-arm", arm)
    for key, worst_of in (("nrmse", max), ("ssim", min)):
        page.choose("#v-metric", key)
        unit = next(
            u
            for u in truth.results["units"]
            if (u["arm"], u["scan"], u["draw"]) == (arm, "scan-1", 0)
        )
        rows = [s for s in unit["slices"] if s[key] is not None]
        page.one("#v-worst").click()
        assert page.painted().split()[1] == str(worst_of(rows, key=lambda s: s[key])["index"])
        page.one("#v-median").click()
        ordered = sorted(rows, key=lambda s: s[key], reverse=worst_of is max)
        assert page.painted().split()[1] == str(ordered[len(ordered) // 2]["index"])


def test_read_out_is_the_stored_value_within_the_stated_step(page: Page, truth: Truth) -> None:
    from selenium.webdriver.common.action_chains import ActionChains

    scan = facts(page)["scans"][0]
    arm = page.script("return document.getElementById('v-arm').value")
    page.keys(HOME, UP, UP)
    canvas = page.one("#v-stage canvas")
    volume = truth.plane("reference", 2), truth.plane("recovered", 2, arm=arm)
    affine = nibabel.load(truth.folder / truth.results["maps"][0]["file"]).affine
    for across, down in ((3, 5), (-40, 21), (17, -30)):
        ActionChains(page.browser).move_to_element_with_offset(canvas, across, down).perform()
        page.painted()
        text = page.one("#v-read").text.replace("−", "-")
        i, j, k = (int(n) for n in re.search(r"i (\d+), j (\d+), k (\d+)", text).groups())
        row, column = volume[0].shape[0] - 1 - k, j
        mm = [float(n) for n in re.search(r"([-\d.]+), ([-\d.]+), ([-\d.]+) mm", text).groups()]
        assert mm == pytest.approx((affine @ [i, j, k, 1])[:3], abs=0.051)
        assert i == 2
        read = float(re.search(r"reference ([\d.e-]+)", text)[1])
        rounding = 0.0005 * max(1.0, read)
        assert read == pytest.approx(volume[0][row, column], abs=scan["step"] / 2 + rounding)
        read = float(re.search(r"windowed ([\d.e-]+), error", text)[1])
        assert read == pytest.approx(volume[1][row, column], abs=scan["step"] / 2 + rounding)
        error = float(re.search(r"error \+?([-\d.e]+) \(", text)[1])
        expected = float(volume[1][row, column] - volume[0][row, column])
        assert error == pytest.approx(expected, abs=scan["step"] + 0.006 * abs(expected))


def test_keyboard_alone_reaches_and_drives_everything(page: Page) -> None:
    from selenium.webdriver.common.action_chains import ActionChains

    seen = []
    for _ in range(80):
        ActionChains(page.browser).send_keys(TAB).perform()
        name = page.script(
            "const e = document.activeElement;"
            "return e.id || e.name || e.className || e.textContent.trim().slice(0, 30)"
        )
        visible = page.script(
            "const e = document.activeElement; const t = e.name === 'v-mode' ?"
            " e.nextElementSibling : e; return getComputedStyle(t).outlineStyle"
        )
        assert visible != "none", name
        seen.append(name)
        if name == "v-stage":
            break
    assert seen[0] == "skip"
    assert {"sort", "v-scan", "v-arm", "v-other", "v-mode", "v-stage"} <= set(seen)
    first = page.painted()
    ActionChains(page.browser).send_keys(HOME, UP, "4").perform()
    assert page.painted().split()[1:3] == ["1", "overlay"] != first.split()[1:3]
    ActionChains(page.browser).key_down(SHIFT).send_keys(RIGHT, UP).key_up(SHIFT).perform()
    page.painted()
    assert " mm" in page.one("#v-read").text
    spoken = page.script("return document.getElementById('v-say').textContent")
    assert spoken


def test_dark_mode_leaves_the_images_alone(page: Page) -> None:
    page.keys(HOME, UP, UP)
    bright = [page.pixels(panel, 48, 64) for panel in range(3)]
    ask = "return getComputedStyle(document.documentElement).backgroundColor"
    ground = page.script(ask)
    page.cdp(
        "Emulation.setEmulatedMedia",
        media="",
        features=[{"name": "prefers-color-scheme", "value": "dark"}],
    )
    assert (
        page.script("return getComputedStyle(document.documentElement).backgroundColor") != ground
    )
    for panel, before in enumerate(bright):
        assert np.array_equal(page.pixels(panel, 48, 64), before)


@pytest.mark.parametrize("scale", [1e-9, 1e12])
def test_one_slice_and_extreme_values(browser: Any, tmp_path: Path, scale: float) -> None:
    plan = StudyPlan(shape=(1, 64, 64), scans=1, draws=1, arms=((2.0, "windowed"),), scale=scale)
    folder = build_study(tmp_path, plan)
    page = Page(browser, write_report(folder))
    assert page.errors() == []
    assert page.one("#v-slice").get_attribute("disabled")
    expected = Truth(folder).plane("reference", 0)
    scan = facts(page)["scans"][0]
    seen = page.pixels(0, *expected.shape)
    assert close(seen, grey_of(expected, scan["step"], *scan["window"]))
    assert page.keys(UP, "w", "m").split()[1] == "0"


def test_further_maps_are_shown_on_one_scale_with_gaps(browser: Any, tmp_path: Path) -> None:
    plan = StudyPlan(
        shape=(3, 32, 24), scans=1, draws=1, arms=((2.0, "windowed"), (3.0, "windowed"))
    )
    folder = build_study(tmp_path, plan)
    results = read_results(folder)
    gain = np.random.default_rng(1).uniform(1, 3, (3, 32, 24)).astype(np.float32)
    gain[0] = np.nan
    for arm, scale in zip(results["arms"], (1.0, 0.5), strict=True):
        name = f"maps/noise_gain-{arm['id']}.nii"
        affine = nibabel.load(folder / results["maps"][0]["file"]).affine
        nibabel.save(nibabel.Nifti1Image(gain * np.float32(scale), affine), folder / name)
        where = {"scan": "scan-1", "arm": arm["id"], "draw": 0, "file": name}
        results["maps"].append({"kind": "noise_gain"} | where)
    (folder / "results.json").write_text(json.dumps(results))
    page = Page(browser, write_report(folder))
    table = one_signed_table().astype(int)
    top = facts(page)["scans"][0]["maps"][0]["top"]
    assert top == pytest.approx(np.percentile(gain[1:], 99.9), rel=0.01)
    page.keys(HOME)
    page.choose("#v-map", "noise_gain")
    page.wait_for(lambda: page.painted().split()[1] == "1")
    for arm, scale in zip(results["arms"], (1.0, 0.5), strict=True):
        page.choose("#v-arm", arm["id"])
        page.keys(HOME, UP)
        number = 1 + np.rint(254 * np.clip(gain[1].T[::-1] * scale / top, 0, 1)).astype(int)
        seen = page.pixels(3, *number.shape).astype(int)
        assert np.abs(seen - table[number]).max() <= 4
    page.keys(HOME)
    gap = page.pixels(3, 24, 32).reshape(-1, 3)
    assert len(np.unique(gap, axis=0)) == 1
    assert page.errors() == []
