"""Charts of kept features and of error by frequency, from measures taken by the quality room."""

import json
import re
import shutil
from pathlib import Path

import numpy as np
import pytest
from study_building import invented_volume, read_results

from mrics.encoding import undersample
from mrics.quality import Measures, measure
from mrics.quality.features import Feature
from mrics.recovery import recover
from mrics.report import write_document, write_report
from mrics.report.feature_chart import kept_features
from mrics.report.folder import open_folder
from mrics.report.panels import panels
from mrics.report.spectral_chart import spectral_curves
from mrics.report.words import number
from mrics.sampling import draw_pattern


@pytest.fixture(scope="module")
def measured(tiny_study: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The tiny study with real measures in the first unit of every arm."""
    folder = Path(shutil.copytree(tiny_study, tmp_path_factory.mktemp("measured") / "study"))
    results = read_results(folder)
    stack = invented_volume((4, 48, 48), 5)
    wanted = Measures(
        features=(Feature(size_mm=3.0), Feature(size_mm=5.0)), feature_sites=4, planes=2
    )
    for place, arm in enumerate(results["arms"]):
        pattern = draw_pattern((48, 48), acceleration=2 + place, calibration=8, seed=1)
        acquisition = undersample(stack, pattern, sigma=0.01)
        image = recover(acquisition, method="zero-filled").image
        found = measure(
            acquisition, image, stack, (1.0, 1.0, 1.0), method="zero-filled", measures=wanted
        )
        unit = next(u for u in results["units"] if u["arm"] == arm["id"])
        unit["measures"] = found.tables
    (folder / "results.json").write_text(json.dumps(results))
    return folder


def test_curves_and_cells_are_those_of_the_units(measured: Path) -> None:
    study = open_folder(measured)
    curves, kept = spectral_curves(study), kept_features(study)
    for arm in study.arms:
        table = next(u["measures"] for u in study.units(arm["id"]) if u.get("measures"))
        assert np.allclose(curves[arm["id"]][0], table["spectral"]["frequency"])
        assert sorted(kept[arm["id"]].values()) == pytest.approx(
            sorted(row["retained"] for row in table["features"])
        )


def test_page_holds_both_charts_and_their_numbers(measured: Path) -> None:
    page = write_report(measured).read_text()
    assert "Small features that survive" in page
    assert "Error by fineness of detail" in page
    for cells in kept_features(open_folder(measured)).values():
        for value in cells.values():
            assert f">{number(value)}</td>" in page


def test_document_has_a_page_of_them(measured: Path, tiny_study: Path) -> None:
    pages = [
        len(re.findall(rb"/Type\s*/Page\b(?!s)", write_document(folder).read_bytes()))
        for folder in (measured, tiny_study)
    ]
    assert pages[0] == pages[1] + 1


def test_study_without_measures_has_no_such_chart(tiny_study: Path) -> None:
    assert panels(open_folder(tiny_study)) == []
