"""The study room: plan of units, running them, results and verdicts."""

from __future__ import annotations

from importlib import import_module
from typing import Any

_HOME = {
    "Difference": "compare",
    "Exported": "export",
    "PlanRow": "plan",
    "StudyPlan": "plan",
    "add_exported_row": "export",
    "compare_studies": "compare",
    "export_draw": "export",
    "load_results": "compare",
    "Optimism": "as_is",
    "optimism": "as_is",
    "plan_study": "plan",
    "Ranking": "ranking",
    "rank_plan": "ranking",
    "recover_measured": "measured",
    "run_study": "run",
    "train": "training",
}

__all__ = [
    "Difference",
    "Exported",
    "Optimism",
    "PlanRow",
    "Ranking",
    "StudyPlan",
    "add_exported_row",
    "compare_studies",
    "export_draw",
    "load_results",
    "optimism",
    "plan_study",
    "rank_plan",
    "recover_measured",
    "run_study",
    "train",
]


def __getattr__(name: str) -> Any:
    if name in _HOME:
        return getattr(import_module(f"{__name__}.{_HOME[name]}"), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
