"""Twenty kills at random moments; the default suite runs two."""

import sys
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).parents[1] / "study"))
from test_ledger import kill_and_resume


@pytest.mark.slow
def test_twenty_kills_lose_no_finished_unit(tmp_path: Path) -> None:
    for seed in range(4):
        kill_and_resume(tmp_path / str(seed), kills=5, seed=10 + seed)
