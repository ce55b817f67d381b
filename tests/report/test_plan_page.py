"""The page of a plan: every arm's numbers, one picture for each pattern."""

import re
from pathlib import Path

import numpy as np
import pytest

from mrics.caution import RESEARCH_ONLY
from mrics.errors import ReportError
from mrics.protocol import load_protocol
from mrics.report import write_plan_page
from mrics.report.pattern_figures import picture_of, radial_density
from mrics.report.rendering import write_page
from mrics.report.words import clock
from mrics.sampling import draw_pattern
from mrics.study import StudyPlan, plan_study

PROTOCOLS = Path(__file__).parents[2] / "protocols"


@pytest.fixture(scope="module")
def plan() -> StudyPlan:
    return plan_study(load_protocol(PROTOCOLS / "knee_tse2d.toml"))


def test_every_arm_stands_with_its_times_and_its_pattern(plan: StudyPlan, tmp_path: Path) -> None:
    page = write_plan_page(plan, tmp_path / "plan.html").read_text()
    for row in plan.rows:
        assert row.arm.label in page
        assert f">{row.pattern.acquired}</td>" in page
        assert f">{clock(row.timing.scan_time_s)}</td>" in page
    different = {row.pattern.hash for row in plan.rows}
    assert page.count("<figure id=") == len(different) < len(plan.rows)
    assert page.count("Spread and order in detail") == len(different)
    assert "largest side lobe / peak" in page
    assert page.count(RESEARCH_ONLY) == 2
    assert not re.search(r"(src|href)=\"(?!data:|#)", page)


def test_page_that_cannot_be_written_is_named(tmp_path: Path) -> None:
    with pytest.raises(ReportError, match=r"plan\.html cannot be written"):
        write_page(tmp_path / "nowhere" / "plan.html", "text")


def test_echoes_lie_where_they_are_acquired(plan: StudyPlan) -> None:
    row = next(row for row in plan.rows if row.timing.shots > 1 and not row.arm.today)
    picture = picture_of(row.pattern, "phase (j)", "readout")
    assert picture.echo is not None
    assert ((picture.echo > 0) == picture.mask).all()
    assert picture.echo.max() == plan.protocol.sequence.echo_train_length


def test_density_is_the_share_of_positions_acquired() -> None:
    """Weighted back by the positions of every ring, the profile gives the count again."""
    mask = draw_pattern((64, 48), acceleration=4, calibration=8, seed=3).mask
    where, share = radial_density(mask)
    _, size = radial_density(np.ones(mask.shape))
    assert (size == 1).all()
    assert share[0] == 1
    grid = [(np.arange(n) - n // 2) / (n / 2) for n in mask.shape]
    radius = np.hypot(grid[0][:, None], grid[1])
    nearest = np.abs(radius[..., None] - where).argmin(-1)
    counts = np.bincount(nearest.ravel(), minlength=len(where))
    assert (share * counts).sum() == pytest.approx(mask.sum(), rel=0.05)
