"""The study room: plan of units, running them, results and verdicts."""

from __future__ import annotations

from importlib import import_module
from typing import Any

_HOME = {
    "Difference": "compare",
    "PlanRow": "plan",
    "StudyPlan": "plan",
    "compare_studies": "compare",
    "load_results": "compare",
    "plan_study": "plan",
    "run_study": "run",
}

__all__ = [
    "Difference",
    "PlanRow",
    "StudyPlan",
    "compare_studies",
    "load_results",
    "plan_study",
    "run_study",
]


def __getattr__(name: str) -> Any:
    if name in _HOME:
        return getattr(import_module(f"{__name__}.{_HOME[name]}"), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
