"""How much better a study looks on scans as they are than on scans remedied."""

from __future__ import annotations

from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import Any

from mrics.errors import StudyError
from mrics.protocol import Protocol
from mrics.protocol.sections import ScanEntry
from mrics.quality import METRICS, compare
from mrics.scan import inspect_scan, read_scan, scan_sigma, write_nifti
from mrics.scan.remedies import remedied
from mrics.study.files import plain, write_json
from mrics.study.run import Progress, run_study

_METRICS = ("nrmse", "psnr", "ssim", "hfen")


@dataclass(frozen=True)
class Optimism:
    """Difference of one metric of one arm, scans as they are less scans remedied.

    Attributes
    ----------
    arm, metric : str
        Arm id and metric.
    as_is, remedied : float
        Means.
    difference : float
        Paired over scans and draws.
    low, high : float or None
        95 % interval; None where there is none.
    flatters : bool
        True where the scan as it is looks better.
    """

    arm: str
    metric: str
    as_is: float
    remedied: float
    difference: float
    low: float | None
    high: float | None
    flatters: bool


def optimism(
    protocol: Protocol,
    out: str | Path,
    *,
    quick: bool = False,
    workers: int | None = 1,
    progress: Progress | None = None,
) -> tuple[Optimism, ...]:
    """Run the same study on the scans as they are and on the scans remedied.

    Every scan is remedied by what its findings ask for (k-space cropped to the measured matrix, a
    smooth phase invented where there is none, noise of the scan's own level added where the noise
    was removed); nothing of the source files is changed.

    Parameters
    ----------
    protocol : Protocol
        The protocol.
    out : str or Path
        Folder for both studies (``as-is``, ``remedied``), the remedied scans and
        ``optimism.json``.
    quick, workers, progress
        As for :func:`run_study`.

    Raises
    ------
    StudyError
        Where no scan has a finding that a remedy helps.
    """
    folder = Path(out)
    axes = protocol.axes()
    told: dict[str, list[str]] = {}
    entries: list[ScanEntry] = []
    scans = protocol.scan_files()
    changed = []
    for files in scans:
        scan = read_scan(files.path, phase=files.phase, imaginary=files.imaginary)
        after = remedied(
            scan, inspect_scan(scan, axes), sigma=scan_sigma(scan), seed=protocol.study.seed
        )
        changed.append(after)
        told[files.name] = list(after.remedies)
    if not any(told.values()):
        raise StudyError(
            "No scan has a finding that a remedy helps, so there is nothing to compare.",
            ", ".join(told),
            "See `mrics inspect`; the study of the scans as they are stands.",
        )
    for files, after in zip(scans, changed, strict=True):
        path = folder / "scans" / f"{files.name}.nii.gz"
        path.parent.mkdir(parents=True, exist_ok=True)
        write_nifti(path, after.data, after)
        entries.append(ScanEntry.model_validate({"path": str(path.resolve())}))
    study = protocol.study.model_copy(update={"scans": tuple(entries)})
    # Scores alone are compared; label maps and edges would not fit a cropped matrix.
    limits = tuple(limit for limit in protocol.acceptance if limit.metric in _METRICS)
    protocol = replace(protocol, quality=None, acceptance=limits)
    other = replace(protocol, study=study, grid=_free(protocol))
    settings: dict[str, Any] = {"quick": quick, "workers": workers, "progress": progress}
    before = run_study(protocol, folder / "as-is", **settings)
    after_results = run_study(other, folder / "remedied", **settings)
    rows = tuple(_rows(before, after_results, protocol.study.seed))
    content = {"remedies": told, "rows": [asdict(row) for row in rows]}
    write_json(folder / "optimism.json", plain(content))
    return rows


def _free(protocol: Protocol) -> Any:
    """The grid without step counts: a cropped matrix has fewer."""
    return protocol.grid.model_copy(update={"phase_steps": None, "partition_steps": None})


def _rows(before: dict[str, Any], after: dict[str, Any], seed: int) -> list[Optimism]:
    rows = []
    arms = {arm["id"] for arm in after["arms"]}
    for arm in before["arms"]:
        if arm["id"] not in arms:
            continue
        for metric in _METRICS:
            one, two = _records(before, arm["id"], metric), _records(after, arm["id"], metric)
            if not one or not two:
                continue
            found = compare(one, two, seed=seed)
            gain = found.estimate.mean
            rows.append(
                Optimism(
                    arm=arm["id"],
                    metric=metric,
                    as_is=_mean(one),
                    remedied=_mean(two),
                    difference=gain,
                    low=found.interval.low if found.interval else None,
                    high=found.interval.high if found.interval else None,
                    flatters=gain < 0 if METRICS[metric].direction == "lower" else gain > 0,
                )
            )
    return rows


Record = tuple[str, int, None, float]


def _records(results: dict[str, Any], arm: str, metric: str) -> list[Record]:
    """One value per scan and draw: slices of a cropped scan are others."""
    records: list[Record] = []
    for unit in results["units"]:
        values = [part[metric] for part in unit["slices"] if part.get(metric) is not None]
        if unit["arm"] == arm and values:
            records.append((unit["scan"], unit["draw"], None, sum(values) / len(values)))
    return records


def _mean(records: list[Record]) -> float:
    return sum(record[3] for record in records) / len(records)
