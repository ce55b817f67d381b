"""Quality: what a recovery cost, in numbers and maps."""

from __future__ import annotations

from importlib import import_module
from typing import Any

from mrics.quality.metrics import (
    METRICS,
    AcceptanceKey,
    Metric,
    acceptance_key,
    acceptance_keys,
    taken_alone,
)

_LAZY = {
    "Comparison": "comparison",
    "Interval": "confidence",
    "Measured": "measuring",
    "Measures": "measures",
    "Summary": "confidence",
    "Verdict": "acceptance",
    "compare": "comparison",
    "compare_arms": "comparison",
    "equivalence": "comparison",
    "holm": "comparison",
    "ideal_observer": "observers.ideal",
    "measure": "measuring",
    "measures_from": "measures",
    "more_scores_planes": "more_scores",
    "non_inferiority": "comparison",
    "summarise": "confidence",
    "ErrorMaps": "maps",
    "error_maps": "maps",
    "rank_patterns": "observers.ranking",
    "score": "scores",
    "score_planes": "scores",
    "verdict": "acceptance",
}

__all__ = [
    "METRICS",
    "AcceptanceKey",
    "Comparison",
    "ErrorMaps",
    "Interval",
    "Measured",
    "Measures",
    "Metric",
    "Summary",
    "Verdict",
    "acceptance_key",
    "acceptance_keys",
    "compare",
    "compare_arms",
    "equivalence",
    "error_maps",
    "holm",
    "ideal_observer",
    "measure",
    "measures_from",
    "more_scores_planes",
    "non_inferiority",
    "rank_patterns",
    "score",
    "score_planes",
    "summarise",
    "taken_alone",
    "verdict",
]


def __getattr__(name: str) -> Any:
    if name in _LAZY:
        return getattr(import_module(f"mrics.quality.{_LAZY[name]}"), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
