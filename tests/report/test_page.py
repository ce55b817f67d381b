"""The page of a study: complete, self-contained, escaped, and clear about what is missing."""

import ast
import json
import re
import shutil
from html.parser import HTMLParser
from pathlib import Path

import pytest
from study_building import StudyPlan, build_study, read_results

from mrics.caution import RESEARCH_ONLY
from mrics.errors import ReportError
from mrics.report import write_report


class Tags(HTMLParser):
    """Collects start tags and text."""

    def __init__(self, page: str) -> None:
        super().__init__()
        self.found: list[tuple[str, dict[str, str | None]]] = []
        self.text = ""
        self.feed(page)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.found.append((tag, dict(attrs)))

    def handle_data(self, data: str) -> None:
        self.text += data

    def every(self, tag: str) -> list[dict[str, str | None]]:
        return [attributes for name, attributes in self.found if name == tag]


@pytest.fixture(scope="module")
def page(small_page: Path) -> str:
    return small_page.read_text()


@pytest.fixture
def own_study(tiny_study: Path, tmp_path: Path) -> Path:
    """A copy that a test may change."""
    return Path(shutil.copytree(tiny_study, tmp_path / "study"))


def change(folder: Path, **values: object) -> None:
    results = read_results(folder) | values
    (folder / "results.json").write_text(json.dumps(results))


def test_caution_stands_first_and_last(page: str) -> None:
    text = " ".join(Tags(page.split("<body>")[1].split("<script")[0]).text.split())
    assert text.startswith("Skip to the answer " + RESEARCH_ONLY)
    assert text.endswith(RESEARCH_ONLY)


def test_question_and_answer_come_before_everything_else(page: str, small_study: Path) -> None:
    results = read_results(small_study)
    assert page.index(results["protocol"]["question"]) < page.index("<main>")
    main = page[page.index("<main>") :]
    where = [
        main.index(text)
        for text in (
            results["verdict"]["sentence"].split(";")[0],
            "<table",
            "What weakens this answer",
            "Look for yourself",
            "What acceleration costs",
            "Arm by arm",
            "Where this comes from",
        )
    ]
    assert where == sorted(where)


def test_nothing_is_fetched(page: str) -> None:
    tags = Tags(page)
    for _, attributes in tags.found:
        for name in ("src", "href", "srcset", "action", "poster", "data"):
            value = attributes.get(name)
            assert value is None or value.startswith(("data:", "#")), value
    assert not tags.every("link")
    assert not re.search(r"url\((?!['\"]?(data:|%23|#))|@import", page)
    policy = next(m for m in tags.every("meta") if m.get("http-equiv"))["content"]
    assert policy is not None
    assert "default-src 'none'" in policy
    assert "http:" not in policy


def test_every_number_of_the_verdict_table_is_the_stored_one(page: str, small_study: Path) -> None:
    table = page[page.index('id="verdict-table"') : page.index("</table>")]
    for arm in read_results(small_study)["arms"]:
        assert f"{arm['metrics']['ssim']['mean']:.3f}" in table
        assert f"{arm['metrics']['psnr']['mean']:.1f}" in table
        for limit in arm["verdict"]["limits"]:
            if limit["status"] == "fail":
                assert f"missed by {abs(limit['margin']):.2g}" in table
    assert table.count("in use today") == 1


def test_pictures_have_text_and_tables_have_headers(page: str) -> None:
    tags = Tags(page)
    assert all(len(image.get("alt") or "") > 20 for image in tags.every("img"))
    assert all(head.get("scope") in ("col", "row") for head in tags.every("th"))
    assert 'lang="en"' in page


def test_same_folder_gives_same_bytes(own_study: Path) -> None:
    assert write_report(own_study).read_bytes() == write_report(own_study).read_bytes()


def test_markup_from_outside_stays_text(tmp_path: Path) -> None:
    bad = "<script>alert(1)</script><img src=x onerror=alert(2)>"
    plan = StudyPlan(shape=(3, 32, 24), scans=1, draws=1, arms=((2.0, "windowed"),), title=bad)
    folder = build_study(tmp_path, plan)
    results = read_results(folder)
    results["scans"][0]["name"] = bad
    results["arms"][0]["label"] = bad
    results["notes"] = [bad]
    results["protocol"]["text"] = bad
    (folder / "results.json").write_text(json.dumps(results))
    page = write_report(folder).read_text()
    assert "<script>alert" not in page
    assert "<img src=x" not in page
    assert "&lt;script&gt;alert(1)" in page


KEEP = {"id", "arm", "scan", "kind", "file", "status", "key", "metric", "plane_axis", "sha256"}
KEEP |= {"schema", "readout_axis", "phase_axis", "partition_axis"}


def spoiled(value: object, bad: str, key: str = "") -> object:
    """Every text of the results replaced, except those that name other parts of them."""
    if isinstance(value, dict):
        return {k: spoiled(v, bad, k) for k, v in value.items()}
    if isinstance(value, list):
        return [spoiled(v, bad, key) for v in value]
    return bad if isinstance(value, str) and key not in KEEP else value


def test_markup_anywhere_in_the_results_stays_text(own_study: Path) -> None:
    bad = "</script><b onclick=x>&amp;'\""
    results = spoiled(read_results(own_study), bad)
    assert isinstance(results, dict)
    results["units"][0]["certificate"] |= {"reached": False, "note": bad}
    results["units_planned"] = 99
    change(own_study, **results)
    page = write_report(own_study).read_text()
    assert "<b onclick" not in page
    assert page.count("&lt;b onclick") > 30
    assert page.count("</script>") == page.count("<script")


def test_python_makes_no_markup() -> None:
    """Tags stand in templates alone."""
    for path in (Path(__file__).parents[2] / "mrics" / "report").glob("*.py"):
        tree = ast.parse(path.read_text())
        for node in ast.walk(tree):
            # Texts that stand alone are docstrings.
            if isinstance(node, ast.Expr) and isinstance(node.value, ast.Constant):
                node.value.value = ""
        for node in ast.walk(tree):
            if isinstance(node, ast.Constant) and isinstance(node.value, str):
                assert not re.search(r"</|<[a-zA-Z!]{2}|<[a-z]>", node.value), (
                    path.name,
                    node.value,
                )


def test_maps_that_are_gone_are_named(own_study: Path) -> None:
    gone = next(m["file"] for m in read_results(own_study)["maps"] if m["kind"] == "recovered")
    (own_study / gone).unlink()
    page = write_report(own_study).read_text()
    assert "Stored maps that are gone" in page
    assert gone in page


def test_page_without_any_map(own_study: Path) -> None:
    shutil.rmtree(own_study / "maps")
    page = write_report(own_study).read_text()
    assert "No images of this arm are stored" in page
    assert "Verdict of every arm" in page


def test_interrupted_study_says_what_is_missing(own_study: Path) -> None:
    results = read_results(own_study)
    last = results["arms"][-1]
    units = [u for u in results["units"] if u["arm"] != last["id"]]
    last["metrics"] = {}
    last["verdict"] = {"status": "undecided", "limits": [], "confidence": ""}
    change(own_study, units=units, arms=results["arms"], units_planned=4)
    page = write_report(own_study).read_text()
    assert "2 of 4 units" in page
    assert f"Nothing yet of: {last['label']}" in page
    assert "No unit of this arm is finished" in page


def test_unreached_certificates_are_listed(own_study: Path) -> None:
    results = read_results(own_study)
    results["units"][0]["certificate"] |= {
        "reached": False,
        "optimality": 3e-3,
        "tolerance": 1e-4,
        "note": "stopped at 60 iterations",
    }
    change(own_study, units=results["units"])
    page = write_report(own_study).read_text()
    assert "1 of 2 recoveries stopped short (measure 0.0030, asked 0.00010)" in page
    assert "stopped at 60 iterations" in page


def test_results_of_a_newer_version_are_refused(own_study: Path) -> None:
    change(own_study, schema=2, mrics="9.0")
    with pytest.raises(ReportError, match=r"schema 2 \(mrics 9.0\)"):
        write_report(own_study)


def test_folder_without_results_is_refused(tmp_path: Path) -> None:
    with pytest.raises(ReportError, match=r"holds no results\.json"):
        write_report(tmp_path)


def test_damaged_results_are_refused(own_study: Path) -> None:
    text = (own_study / "results.json").read_text()
    (own_study / "results.json").write_text(text[:200])
    with pytest.raises(ReportError, match="cannot be read"):
        write_report(own_study)
    (own_study / "results.json").write_text('{"schema": 1}')
    with pytest.raises(ReportError, match="lacks mrics, protocol, scans, units, arms"):
        write_report(own_study)


def test_damaged_map_is_named(own_study: Path) -> None:
    name = next(m["file"] for m in read_results(own_study)["maps"] if m["kind"] == "reference")
    (own_study / name).write_bytes(b"not an image")
    with pytest.raises(ReportError, match=re.escape(name)):
        write_report(own_study)


def test_map_outside_the_folder_is_refused(own_study: Path) -> None:
    maps = read_results(own_study)["maps"]
    maps[0]["file"] = "../elsewhere.nii"
    change(own_study, maps=maps)
    with pytest.raises(ReportError, match="outside the study folder"):
        write_report(own_study)


def test_search_is_told_look_by_look(own_study: Path) -> None:
    arm = read_results(own_study)["arms"][1]
    looks = [
        {"acceleration": 4.0, "arm": arm["id"], "draws": 3, "level": 0.975, "status": "fail"},
        {"acceleration": 3.0, "arm": arm["id"], "draws": 5, "level": 0.975, "status": "pass"},
    ]
    search = {
        "family": "power law, windowed",
        "arm": arm["id"],
        "acceleration": 3.0,
        "candidates": 16,
        "decisions": looks,
        "findings": ["R = 5 passed although R = 4 failed."],
    }
    change(own_study, searches=[search])
    page = write_report(own_study).read_text()
    assert "R = 3.00 is the fastest that passes" in page
    assert "2 looks at 16 accelerations" in page
    assert "97.5 %" in page
    assert "R = 5 passed although R = 4 failed." in page
