"""Study folders for the report's tests."""

from __future__ import annotations

from pathlib import Path

import pytest
from study_building import StudyPlan, build_study


@pytest.fixture(scope="session")
def small_study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Two scans, four arms, two draws, five slices: not to be changed by a test."""
    return build_study(tmp_path_factory.mktemp("study"), StudyPlan())
