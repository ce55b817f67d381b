"""The PDF, the single figures and the page of two studies."""

import json
import re
import shutil
import xml.etree.ElementTree as ET
import zlib
from pathlib import Path

import pytest
from PIL import Image
from study_building import read_results

from mrics.caution import RESEARCH_ONLY
from mrics.errors import ReportError
from mrics.report import write_compare_page, write_document, write_figures


@pytest.fixture(scope="module")
def pdf(tiny_study: Path) -> bytes:
    return write_document(tiny_study).read_bytes()


def words_of(pdf: bytes) -> str:
    """Text that a reader can select: the strings shown by the pages' content streams."""
    shown = []
    for packed in re.findall(rb"stream\r?\n(.*?)\r?\nendstream", pdf, re.DOTALL):
        try:
            # A checksum whose last byte is a carriage return loses it to the line's end.
            content = zlib.decompressobj().decompress(packed)
        except zlib.error:
            continue
        for block in re.findall(rb"BT(.*?)ET", content, re.DOTALL):
            shown.append(b"".join(re.findall(rb"\(((?:[^()\\]|\\.)*)\)", block)))
    # Character codes take two bytes each; those of Latin text have a zero byte first.
    return (
        b"\n".join(shown)
        .replace(b"\x00", b"")
        .decode("latin-1")
        .replace("\\(", "(")
        .replace("\\)", ")")
    )


def test_document_has_a_page_for_each_arm_between_front_and_appendix(
    pdf: bytes, tiny_study: Path
) -> None:
    arms = len(read_results(tiny_study)["arms"])
    assert len(re.findall(rb"/Type\s*/Page\b(?!s)", pdf)) == 1 + 1 + arms + 1


def test_document_text_can_be_selected(pdf: bytes, tiny_study: Path) -> None:
    text = words_of(pdf)
    results = read_results(tiny_study)
    assert results["protocol"]["title"] in text
    assert results["protocol"]["question"] in text
    assert text.count(RESEARCH_ONLY) == 2 * (3 + len(results["arms"]))
    for arm in results["arms"]:
        assert f"{arm['metrics']['ssim']['mean']:.3f}" in text
    assert results["scans"][0]["sha256"] in text
    assert "Ravishankar and Bresler 2011" in text.replace("\n", " ")


def test_document_charts_are_vector(pdf: bytes) -> None:
    """Pictures are scans, masks, spreads and colour bars alone, far below a chart's resolution."""
    widths = [int(n) for n in re.findall(rb"/Width (\d+)", pdf)]
    assert widths
    assert max(widths) < 400


def test_document_of_a_study_without_maps(tiny_study: Path, tmp_path: Path) -> None:
    folder = Path(shutil.copytree(tiny_study, tmp_path / "study"))
    shutil.rmtree(folder / "maps")
    text = words_of(write_document(folder).read_bytes())
    assert text.count("No images of this arm are stored.") == 2
    assert "Stored map that is gone" in text


def test_figures_for_slides_and_papers(tiny_study: Path, tmp_path: Path) -> None:
    folder = Path(shutil.copytree(tiny_study, tmp_path / "study"))
    written = write_figures(folder)
    names = {path.name for path in written}
    arms = [arm["id"] for arm in read_results(folder)["arms"]]
    stems = {"metrics", *(f"{a}-{k}" for a in arms for k in ("pattern", "images", "slices"))}
    assert names == {f"{s}{e}" for s in stems for e in (".png", ".svg")}
    for path in written:
        if path.suffix == ".png":
            with Image.open(path) as image:
                assert image.info["dpi"][0] == pytest.approx(300, abs=0.5)
                assert image.width > 2000
        else:
            assert ET.parse(path).getroot().tag.endswith("svg")


def test_folder_that_cannot_be_written_is_named(tiny_study: Path, tmp_path: Path) -> None:
    folder = Path(shutil.copytree(tiny_study, tmp_path / "study"))
    (folder / "figures").write_text("in the way")
    with pytest.raises(ReportError, match="Figures cannot be written"):
        write_figures(folder)


def test_two_studies_side_by_side(tiny_study: Path, tmp_path: Path) -> None:
    other = Path(shutil.copytree(tiny_study, tmp_path / "<b>second"))
    results = read_results(other)
    results["arms"][1]["metrics"]["ssim"]["mean"] += 0.01
    results["arms"][0]["verdict"]["status"] = "undecided"
    results["protocol"]["values"]["study"]["draws"] = 7
    results["scans"][0]["sha256"] = "f" * 64
    (other / "results.json").write_text(json.dumps(results))
    page = write_compare_page(tiny_study, other, tmp_path / "compare.html").read_text()
    assert "&lt;b&gt;second" in page
    assert "<b>second" not in page
    assert ">+0.010<" in page
    assert "study.draws" in page
    assert "f" * 12 in page
    assert results["arms"][0]["label"] in page
    assert page.count(RESEARCH_ONLY) == 2
    assert str(tmp_path) not in page


def test_a_study_beside_itself_has_nothing_to_tell(tiny_study: Path, tmp_path: Path) -> None:
    page = write_compare_page(tiny_study, tiny_study, tmp_path / "compare.html").read_text()
    assert "is judged alike" in page
    assert "give the same means" in page
    assert page.count("No difference.") == 2
