"""Panels of receive channels, drawn from a study of a simulated array."""

import json
from pathlib import Path

import nibabel
import numpy as np
import pytest
from small_study import PROTOCOL, write_small_study

from mrics.report import write_document, write_figures, write_report
from mrics.report.folder import open_folder
from mrics.report.noise_gain_panel import PERCENTILES
from mrics.report.panels import panels
from mrics.report.words import number
from mrics.study import run_study

TEXT = (
    PROTOCOL.replace(
        'calibration = 8\nrecovery = "zero-filled"', 'calibration = 16\nrecovery = "unfold"'
    )
    .replace("acceleration = [2, 3]\ncalibration = 8", "acceleration = 3\ncalibration = 16")
    .replace(
        '[[recovery]]\nmethod = "zero-filled"',
        '[[recovery]]\nmethod = "least-squares"\niterations = 8',
    )
    .replace("draws = 2", "draws = 1\nsnr = 20\nvirtual_channels = 4")
    + "[coils]\nnumber = 5\ncorrelation = 0.2\n[quality]\nnoise_replicas = 3\n"
)


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("array")
    protocol = write_small_study(folder, 1, TEXT, (48, 64, 3))
    run_study(protocol, folder / "out")
    return folder / "out"


def test_every_channel_and_its_origin_are_shown(study: Path) -> None:
    by_name = {panel.name: panel for panel in panels(open_folder(study))}
    maps = by_name["sensitivities"]
    assert [row[0] for row in maps.rows] == ["0", "1", "2", "3", "4"]
    assert "Sensitivities simulated: 5 loops of radius" in maps.text
    assert "noise covariance of the simulated array, 0.2 between neighbours" in maps.text
    stored = open_folder(study).find("sensitivities")
    assert stored is not None
    size = np.abs(stored.load()[0])
    for channel, row in enumerate(maps.rows):
        assert row[1] == number(size[..., channel].max())
    figure = maps.figure()
    shown = [axes for axes in figure.axes if axes.get_images()]
    assert len(shown) == 10, "modulus and phase of five channels"
    labels = {axes.get_xlabel() for axes in figure.axes}
    assert {"phase (degrees)", "modulus (whitened root sum of squares is 1)"} <= labels


def test_energy_kept_is_that_of_the_singular_values(study: Path) -> None:
    by_name = {panel.name: panel for panel in panels(open_folder(study))}
    curve = by_name["singular-values"]
    [scan] = json.loads((study / "results.json").read_text())["scans"]
    values = np.array(scan["receive"]["singular_values"])
    kept = 100 * (values[:4] ** 2).sum() / (values**2).sum()
    assert f"4 virtual channels, which keep {kept:.2f} % of it" in curve.text
    assert [row[3] for row in curve.rows][3] == f"{kept:.3f}"
    assert curve.rows[-1][3] == "100.000"


def test_noise_gain_is_analytic_or_measured_with_its_percentiles(study: Path) -> None:
    by_name = {panel.name: panel for panel in panels(open_folder(study))}
    gain = by_name["noise-gain"]
    today, candidate = gain.rows
    assert today[1:3] == ("analytic", "2.00")
    assert candidate[1] == "replicas"
    opened = open_folder(study)
    achieved = next(u["acceleration"] for u in opened.units(opened.arms[1]["id"]))
    assert candidate[2] == number(achieved)
    body = nibabel.load(study / "reference" / "object-0_body.nii.gz").get_fdata() > 0
    stored = opened.find("noise_gain")
    assert stored is not None
    inside = stored.load()[0][body & (stored.load()[0] > 0)]
    assert today[3:-1] == tuple(number(v) for v in np.percentile(inside, PERCENTILES))
    bars = [axes.get_xlabel() for axes in gain.figure().axes]
    assert any(text.startswith("noise gain g") for text in bars)


def test_page_document_and_figures_hold_them(study: Path) -> None:
    page = write_report(study).read_text()
    for title in ("Receive sensitivities", "Energy in the receive channels", "Noise gain"):
        assert f">{title}<" in page
    table = page[page.index('id="verdict-table"') :]
    first, second = table.index("unfold"), table.index("least-squares")
    assert first < table.index("in use today") < second, "today's arm stands beside the candidates"
    assert "5 channels compressed to 4" in page
    assert "sensitivities estimated from the arm" in page
    assert write_document(study).stat().st_size > 10_000
    names = {path.stem for path in write_figures(study)}
    assert {"sensitivities", "singular-values", "noise-gain"} <= names


def test_a_study_of_one_channel_has_none(small_study: Path) -> None:
    names = {panel.name for panel in panels(open_folder(small_study))}
    assert not names & {"sensitivities", "singular-values", "noise-gain"}
