"""MRI undersampling planner and reconstruction pipeline for protocol development.

The stable face for notebooks and scripts:

>>> import mrics
>>> scan = mrics.read_scan("knee.nii.gz")                              # doctest: +SKIP
>>> pattern = mrics.draw_pattern((300, 112), acceleration=4, seed=1)   # doctest: +SKIP
>>> acquisition = mrics.undersample(scan, pattern)                     # doctest: +SKIP
>>> recovered = mrics.recover(acquisition, method="wavelet")           # doctest: +SKIP
>>> recovered.certificate.iterations                                   # doctest: +SKIP

Research and protocol development only, not for diagnosis; site rules and licensed practice decide.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

__version__ = "0.1.1"

if TYPE_CHECKING:
    from mrics.encoding import undersample
    from mrics.errors import MricsError
    from mrics.protocol import load_protocol
    from mrics.quality import score
    from mrics.recovery import recover
    from mrics.sampling import draw_pattern
    from mrics.scan import read_scan
    from mrics.study import run_study

_ROOM_OF = {
    "MricsError": "mrics.errors",
    "draw_pattern": "mrics.sampling",
    "load_protocol": "mrics.protocol",
    "read_scan": "mrics.scan",
    "recover": "mrics.recovery",
    "run_study": "mrics.study",
    "score": "mrics.quality",
    "undersample": "mrics.encoding",
}

__all__ = [
    "MricsError",
    "draw_pattern",
    "load_protocol",
    "read_scan",
    "recover",
    "run_study",
    "score",
    "undersample",
]


def __getattr__(name: str) -> Any:
    if name in _ROOM_OF:
        return getattr(importlib.import_module(_ROOM_OF[name]), name)
    raise AttributeError(f"module 'mrics' has no attribute {name!r}")


def __dir__() -> list[str]:
    return [*__all__, "__version__"]
