"""The search for the fastest acceleration against running every one."""

from pathlib import Path
from typing import Any

import pytest
from small_study import PROTOCOL, write_small_study

from mrics.errors import ProtocolError
from mrics.protocol import from_text
from mrics.study import plan_study, run_study
from mrics.study.plan import PlanRow
from mrics.study.search import search_family

GRID = "search_from = 1.2\nsearch_to = 4.2\n"
ACCELERATIONS = [round(1.2 + 0.2 * n, 4) for n in range(16)]


def searched(limit: float) -> str:
    text = PROTOCOL.replace("acceleration = [2, 3]", f'acceleration = "search"\n{GRID}')
    return text.replace("nrmse_max = 0.5", f"nrmse_max = {limit}").replace("draws = 2", "draws = 4")


@pytest.mark.parametrize("limit", [0.05, 0.09, 0.12, 0.18])
def test_it_finds_what_the_full_grid_finds(limit: float, tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=3, protocol=searched(limit))
    results = run_study(protocol, tmp_path / "search")
    [search] = results["searches"]
    listed = ", ".join(str(a) for a in ACCELERATIONS)
    every = searched(limit).replace(f'"search"\n{GRID}', f"[{listed}]")
    (tmp_path / "every.toml").write_text(every)
    full = run_study(tmp_path / "every.toml", tmp_path / "grid")
    passing = [
        a["acceleration_target"]
        for a in full["arms"]
        if not a["today"] and a["verdict"]["status"] == "pass"
    ]
    best = max(passing) if passing else None
    place = ACCELERATIONS.index(best) if best is not None else -1
    mine = ACCELERATIONS.index(search["acceleration"]) if search["arm"] else -1
    assert abs(place - mine) <= 1
    units = len([u for u in results["units"] if not u["arm"].startswith("today")])
    assert units <= len([u for u in full["units"] if not u["arm"].startswith("today")]) / 3
    assert [d["acceleration"] for d in search["decisions"]]
    assert all(d["level"] == 0.975 for d in search["decisions"])
    # Arms that were looked at are arms of the study; shared draws have shared patterns.
    ids = {a["id"] for a in results["arms"]}
    assert {d["arm"] for d in search["decisions"]} <= ids
    shared = {(u["arm"], u["scan"], u["draw"]): u["pattern_hash"] for u in full["units"]}
    for unit in results["units"]:
        assert shared[unit["arm"], unit["scan"], unit["draw"]] == unit["pattern_hash"]


def test_a_quality_that_does_not_fall_steadily_is_reported(tmp_path: Path) -> None:
    plan = plan_study(from_text(searched(0.12), write_small_study(tmp_path, 3)))
    [family] = plan.families().values()

    def run(row: PlanRow, draws: int) -> list[dict[str, Any]]:
        # Error falls with acceleration from R = 2.6 on, as no recovery's should.
        level = 0.1 - 0.01 * float(row.arm.acceleration)
        return [
            {
                "scan": scan,
                "draw": draw,
                "slices": [{"index": 0, "frame": 0, "nrmse": level + 0.0001 * draw}],
            }
            for scan in ("one", "two", "three")
            for draw in range(draws)
        ]

    found = search_family(family, run, plan.protocol.acceptance, None, seed=1)
    assert found.acceleration == 4.2
    assert found.findings
    assert all("quality does not fall steadily here" in text for text in found.findings)
    assert "nrmse is better at R = 4.2 than at R = 4" in found.findings[-1]


def test_an_undecided_first_look_takes_all_draws_and_stops(tmp_path: Path) -> None:
    plan = plan_study(from_text(searched(0.12), write_small_study(tmp_path, 3)))
    [family] = plan.families().values()

    def run(row: PlanRow, draws: int) -> list[dict[str, Any]]:
        # Scans lie on both sides of the limit, so no number of draws decides.
        return [
            {
                "scan": scan,
                "draw": draw,
                "slices": [{"index": 0, "frame": 0, "nrmse": 0.12 + shift}],
            }
            for scan, shift in (("one", -0.05), ("two", 0.0), ("three", 0.05))
            for draw in range(draws)
        ]

    found = search_family(family, run, plan.protocol.acceptance, None, seed=1)
    assert found.arm is None
    looks = [(d.acceleration, d.draws) for d in found.decisions]
    assert len({acceleration for acceleration, _ in looks}) * 2 == len(looks)
    assert [draws for _, draws in looks[:2]] == [2, 4]


def test_searching_without_limits_is_refused(tmp_path: Path) -> None:
    text = searched(0.1).replace("nrmse_max = 0.1\n", "")
    with pytest.raises(ProtocolError, match="no acceptance limit"):
        from_text(text)
