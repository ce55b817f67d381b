"""Study folders for the report's tests."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from study_building import StudyPlan, build_study

from mrics.report import write_report


@pytest.fixture(scope="session")
def small_study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Two scans, four arms, two draws, five slices: not to be changed by a test."""
    return build_study(tmp_path_factory.mktemp("study"), StudyPlan())


@pytest.fixture(scope="session")
def tiny_study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Two scans, two arms, one draw, three slices: copied by tests that change it."""
    arms = ((2.0, "zero-filled"), (3.0, "windowed"))
    plan = StudyPlan(shape=(3, 32, 24), scans=2, draws=1, arms=arms)
    return build_study(tmp_path_factory.mktemp("tiny"), plan)


@pytest.fixture(scope="session")
def browser() -> Iterator[Any]:
    """One headless browser for all tests."""
    from browsing import open_browser

    opened = open_browser()
    yield opened
    opened.quit()


@pytest.fixture(scope="session")
def small_page(small_study: Path) -> Path:
    """The page of the small study."""
    return write_report(small_study)
