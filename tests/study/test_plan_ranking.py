"""Patterns of a plan ranked on its first scan."""

from pathlib import Path

import nibabel
import numpy as np
import pytest
from small_study import AFFINE, PROTOCOL, small_object, write_small_study
from typer.testing import CliRunner

from mrics.cli.main import app
from mrics.cli.tables import columns, ranking_table
from mrics.errors import StudyError
from mrics.protocol import load_protocol
from mrics.quality import rank_patterns
from mrics.report import write_plan_page
from mrics.scan import Axes
from mrics.study import plan_study, rank_plan

SHAPE = (64, 64, 5)
QUALITY = "[quality]\nfeatures = [{ size_mm = [2.5, 4.0], contrast = 15.0 }]\n"


def test_the_ranking_is_that_of_the_scan_and_its_noise(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    text = PROTOCOL.replace("draws = 2", "draws = 2\nsnr = 10.0")
    protocol = write_small_study(tmp_path, scans=1, protocol=text, shape=SHAPE)
    plan = plan_study(load_protocol(protocol))
    ranking = rank_plan(plan)
    scan = plan.prepared(0)
    assert ranking.sigma == pytest.approx(np.abs(scan.stack[scan.body]).mean() / 10.0, rel=1e-3)
    assert list(ranking.by_pattern()) == [
        "today: equispaced, R = 2",
        "power law, R = 2",
        "power law, R = 3",
    ]
    direct = rank_patterns(
        {row.arm.id: row.pattern for row in plan.rows},
        Axes("i", "j").to_planes(small_object(0, SHAPE)),
        (1.2, 1.0),
        ranking.sigma,
        mask=scan.body,
    )
    for mine, theirs in zip(ranking.rows, direct, strict=True):
        assert mine["d_prime"] == pytest.approx(theirs["d_prime"], rel=1e-5)
        assert mine["rank"] == theirs["rank"]
    for width in (60, 80, 100):
        monkeypatch.setenv("COLUMNS", str(width))
        table = ranking_table(ranking)
        assert max(map(len, table.splitlines())) <= columns() == width
        assert table.count("noise only") == len(plan.rows) * (2 if width == 60 else 1)
    printed = CliRunner().invoke(app, ["plan", str(protocol), "--rank"]).stdout
    assert table in printed
    assert "noise only" not in CliRunner().invoke(app, ["plan", str(protocol)]).stdout
    page = write_plan_page(plan, tmp_path / "plan.html", ranking).read_text()
    assert "What the data hold of small features" in page
    assert page.count("noise only") >= len(ranking.rows)
    assert "What the data hold" not in write_plan_page(plan, tmp_path / "bare.html").read_text()


def test_sizes_are_those_of_the_protocol_and_channels_count(tmp_path: Path) -> None:
    text = PROTOCOL + QUALITY + "[coils]\nnumber = 4\n"
    protocol = write_small_study(tmp_path, scans=1, protocol=text, shape=SHAPE)
    ranking = rank_plan(plan_study(load_protocol(protocol)))
    assert ranking.channels == 4
    assert ranking.contrast == 15.0
    assert {size for _, size in ranking.tasks()} == {2.5, 4.0}
    assert all(0 < row["d_prime"] <= row["noise_only"] for row in ranking.rows)


def test_without_noise_nothing_can_be_ranked(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=1, shape=SHAPE)
    image = np.zeros(SHAPE, np.float32)
    image[16:48, 16:48] = 100.0
    nibabel.save(nibabel.Nifti1Image(image, AFFINE), tmp_path / "object_0.nii.gz")
    with pytest.raises(StudyError, match="cannot be ranked without noise") as caught:
        rank_plan(plan_study(load_protocol(protocol)))
    assert "study.snr" in caught.value.where
