"""The patterns of a plan ranked by what their data hold of small features, before any recovery."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from mrics.errors import StudyError
from mrics.sampling import Pattern
from mrics.study.plan import PlanRow, StudyPlan

SIZES_MM = (2.0, 3.0, 5.0)
CONTRAST = 20.0


@dataclass(frozen=True)
class Ranking:
    """Ideal observer's view of every pattern of a plan.

    Attributes
    ----------
    rows : list of dict
        One per pattern, task and size, as :func:`mrics.quality.rank_patterns` gives them.
    scan : str
        Label of the scan that background and noise were taken from.
    sigma : float
        Noise level, added noise included.
    contrast : float
        Of the features, in per cent of the mean magnitude in the body.
    channels : int
        Receive channels counted.
    """

    rows: list[dict[str, Any]]
    scan: str
    sigma: float
    contrast: float
    channels: int

    def tasks(self) -> list[tuple[str, float]]:
        """(task, size in mm) of the columns, in order."""
        return list(dict.fromkeys((row["task"], row["size_mm"]) for row in self.rows))

    def by_pattern(self) -> dict[str, list[dict[str, Any]]]:
        """The rows of every pattern, in the order of :meth:`tasks`."""
        found: dict[str, list[dict[str, Any]]] = {}
        for row in self.rows:
            found.setdefault(row["pattern"], []).append(row)
        return found


def rank_plan(plan: StudyPlan) -> Ranking:
    """Rank the first draws of a plan's patterns on its first scan.

    Background and noise are those of the studied slices; with receive channels the sensitivities
    are those in the middle of them. Sizes and contrast are those of the discs in ``[quality]``
    where there are any, else 2, 3 and 5 mm at 20 %.

    Raises
    ------
    StudyError
        Where the scan has no noise and none is added: every pattern would show everything.
    QualityError
        Where no background can be fitted.
    """
    from mrics.quality import rank_patterns

    scan = plan.prepared(0)
    sigma = float(np.hypot(scan.sigma, plan.noise.added(scan)))
    if sigma == 0.0:
        raise StudyError(
            "Patterns cannot be ranked without noise: the scan has none and none is added.",
            f"{plan.protocol.path}: study.snr",
            "Give the SNR to be expected as snr in [study].",
        )
    measures = plan.protocol.measures()
    discs = [one for one in (measures.features if measures else ()) if one.shape == "disc"]
    sizes = sorted({one.size_mm for one in discs}) or list(SIZES_MM)
    contrast = min((abs(one.contrast) for one in discs), default=CONTRAST)
    maps = None
    if scan.sensitivities is not None:
        from mrics.encoding import whitening

        maps = scan.sensitivities[len(scan.planes) // 2]
        if scan.covariance is not None:
            matrix = whitening(scan.covariance / np.trace(scan.covariance).real * len(maps))
            maps = np.tensordot(matrix, maps, axes=1)
    mm = scan.scan.voxel_mm
    _, u, v = (mm[axis] for axis in plan.axes.order)
    rows = rank_patterns(
        _patterns(plan.rows),
        scan.stack,
        (u, v),
        sigma,
        sizes_mm=sizes[:3],
        contrast=contrast,
        mask=scan.body,
        sensitivities=maps,
    )
    return Ranking(rows, plan.scan_ids[0], sigma, contrast, 1 if maps is None else len(maps))


def _patterns(rows: tuple[PlanRow, ...]) -> dict[str, Pattern]:
    """Different patterns by a name without the recovery."""
    found: dict[str, Pattern] = {}
    seen: set[str] = set()
    for row in rows:
        if row.pattern.hash not in seen:
            seen.add(row.pattern.hash)
            arm = row.arm
            size = "from file" if arm.acceleration is None else f"R = {arm.acceleration:g}"
            name = f"{'today: ' if arm.today else ''}{arm.sampling_name}, {size}"
            found[name] = row.pattern
    return found
