"""Where the shipped protocols and sample scans lie: in the repository or in the wheel."""

from __future__ import annotations

from pathlib import Path

import mrics
from mrics.errors import StudyError

DEMO = "knee_gre3d.toml"


def demo_protocol() -> Path:
    """The protocol that ``mrics demo`` runs.

    Raises
    ------
    StudyError
        Where an installation lacks it.
    """
    package = Path(mrics.__file__).parent
    for root in (package / "_shipped", package.parent):
        if (root / "protocols" / DEMO).is_file() and (root / "sample_data").is_dir():
            return root / "protocols" / DEMO
    raise StudyError(
        "The sample protocol and scans are not installed.", str(package), "Install mrics again."
    )
