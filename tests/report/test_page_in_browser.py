"""The page as a person meets it: sorting, print, markup kept as text, accessibility."""

import base64
import json
import re
import shutil
from pathlib import Path
from typing import Any

import pytest
from browsing import Page, faults
from study_building import StudyPlan, build_study, read_results

from mrics.protocol import load_protocol
from mrics.report import write_compare_page, write_plan_page, write_report
from mrics.study import plan_study

pytestmark = pytest.mark.browser

PROTOCOL = Path(__file__).parents[2] / "protocols" / "knee_tse2d.toml"
MM = 96 / 25.4


@pytest.fixture
def page(browser: Any, small_page: Path) -> Page:
    return Page(browser, small_page)


def column(page: Page, number: int) -> list[str]:
    return page.script(
        "return [...document.querySelectorAll('#verdict-table tbody tr')]"
        f".map((r) => r.cells[{number}].dataset.value ?? r.cells[{number}].textContent.trim())"
    )


def test_verdict_table_sorts_by_number_and_by_name(page: Page) -> None:
    heads = page.browser.find_elements("css selector", "#verdict-table thead button")
    names = [head.text.split(" ")[0] for head in heads]
    for name in ("R", "Time", "Saved", "NRMSE", "SSIM"):
        at = names.index(name)
        heads[at].click()
        rising = [float(v) for v in column(page, at)]
        assert rising == sorted(rising)
        assert len(set(rising)) > 1
        heads[at].click()
        assert [float(v) for v in column(page, at)] == rising[::-1]
        sorted_by = page.script(
            "return [...document.querySelectorAll('#verdict-table th[aria-sort]')]"
            ".map((h) => h.textContent.trim() + h.ariaSort)"
        )
        assert len(sorted_by) == 1
        assert sorted_by[0].endswith("descending")
    heads[0].click()
    labels = column(page, 0)
    assert labels == sorted(labels, key=str.casefold)


def printed(page: Page, width_mm: float, height_mm: float) -> bytes:
    answer = page.cdp(
        "Page.printToPDF",
        paperWidth=width_mm / 25.4,
        paperHeight=height_mm / 25.4,
        printBackground=True,
        preferCSSPageSize=False,
    )
    return base64.b64decode(answer["data"])


@pytest.mark.parametrize("paper", [(210.0, 297.0), (215.9, 279.4)], ids=["A4", "Letter"])
def test_print_has_its_pages_and_cuts_nothing(
    page: Page, small_study: Path, paper: tuple[float, float]
) -> None:
    arms = len(read_results(small_study)["arms"])
    pdf = printed(page, *paper)
    pages = len(re.findall(rb"/Type\s*/Page\b(?!s)", pdf))
    # Answer, doubts and chart; one page for each arm; definitions, provenance and protocol.
    assert arms + 3 <= pages <= arms + 6
    page.width(round((paper[0] - 22) * MM), round((paper[1] - 24) * MM))
    page.cdp("Emulation.setEmulatedMedia", media="print", features=[])
    too_wide = page.script(
        "const w = document.documentElement.clientWidth;"
        "return [...document.querySelectorAll('body *')].filter((e) => {"
        "  const s = getComputedStyle(e);"
        "  return s.position !== 'absolute' && e.getBoundingClientRect().right > w + 1 })"
        ".map((e) => e.outerHTML.slice(0, 80))"
    )
    assert too_wide == []
    tallest = page.script(
        "return Math.max(...[...document.querySelectorAll('figure')]"
        ".map((e) => e.getBoundingClientRect().height))"
    )
    assert tallest < (paper[1] - 24) * MM
    arm_heights = page.script(
        "return [...document.querySelectorAll('article.arm')]"
        ".map((e) => e.getBoundingClientRect().height)"
    )
    assert max(arm_heights) < (paper[1] - 24) * MM


def test_folded_parts_are_printed(page: Page) -> None:
    page.script("window.dispatchEvent(new Event('beforeprint'));")
    assert page.script("return document.querySelectorAll('details:not([open])').length") == 0
    page.script("window.dispatchEvent(new Event('afterprint'))")
    assert page.script("return document.querySelectorAll('details[open]').length") == 0


def test_markup_in_names_stays_text(browser: Any, tmp_path: Path) -> None:
    bad = "</script><img src=x onerror=\"document.title='taken'\"><script>1"
    plan = StudyPlan(shape=(3, 32, 24), scans=1, draws=1, arms=((2.0, "windowed"),), title=bad)
    folder = build_study(tmp_path, plan)
    results = read_results(folder)
    results["scans"][0]["name"] = bad
    results["arms"][0]["label"] = bad
    (folder / "results.json").write_text(json.dumps(results))
    page = Page(browser, write_report(folder))
    assert page.errors() == []
    assert page.script("return document.title") == bad
    assert page.one("h1").text == bad
    assert page.script("return document.querySelectorAll('img[src=x]').length") == 0
    assert page.script("return document.getElementById('v-scan').options[0].text") == bad
    assert bad in page.script("return document.querySelector('.panel:nth-child(2) p').textContent")


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_no_accessibility_fault_by_axe(page: Page, scheme: str) -> None:
    features = [{"name": "prefers-color-scheme", "value": scheme}]
    page.cdp("Emulation.setEmulatedMedia", media="", features=features)
    assert faults(page) == []


def test_no_accessibility_fault_beside_the_report(
    browser: Any, tiny_study: Path, tmp_path: Path
) -> None:
    """The page of two studies and the page of a plan."""
    other = Path(shutil.copytree(tiny_study, tmp_path / "second"))
    results = read_results(other)
    results["arms"][1]["metrics"]["ssim"]["mean"] += 0.01
    results["arms"][0]["verdict"]["status"] = "undecided"
    (other / "results.json").write_text(json.dumps(results))
    compared = write_compare_page(tiny_study, other, tmp_path / "compare.html")
    planned = tmp_path / "plan.html"
    write_plan_page(plan_study(load_protocol(PROTOCOL)), planned)
    for path in (compared, planned):
        page = Page(browser, path)
        assert page.errors() == []
        assert faults(page) == []


def test_a_thousand_slices_scroll_in_the_page(browser: Any, tmp_path: Path) -> None:
    plan = StudyPlan(shape=(1000, 24, 16), scans=1, draws=1, arms=((2.0, "windowed"),))
    page = Page(browser, write_report(build_study(tmp_path, plan)))
    assert page.errors() == []
    assert page.script("return document.getElementById('v-slice').max") == "999"
    assert page.keys("\ue010").split()[1] == "999"
