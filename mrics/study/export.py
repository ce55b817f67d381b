"""One draw of one arm as a sampling table, and its row in the verdict of a finished study."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from mrics.errors import StudyError
from mrics.protocol import Protocol
from mrics.sampling import write_table
from mrics.sampling.ordered import Ordered
from mrics.scan import read_header
from mrics.study.aggregate import arm_numbers
from mrics.study.compare import load_results
from mrics.study.files import plain, write_json
from mrics.study.plan import plan_study
from mrics.study.prepare import PlaneChoice
from mrics.study.units import draw_of, pattern_grid, run_unit_here


@dataclass(frozen=True)
class Exported:
    """What was written for one draw.

    Attributes
    ----------
    arm, label : str
        Arm and its name for people.
    draw : int
        Number of the draw.
    played : Ordered
        The pattern in its order of acquisition.
    files : tuple of Path
        CSV table, JSON table, NIfTI mask.
    """

    arm: str
    label: str
    draw: int
    played: Ordered
    files: tuple[Path, ...]


def export_draw(protocol: Protocol, arm: str, draw: int, out: str | Path) -> Exported:
    """Write the sampling table of one draw.

    Parameters
    ----------
    protocol : Protocol
        The protocol.
    arm : str
        Id of the arm.
    draw : int
        Number of the draw, from 0; the pattern of the study's draw of that number of its first
        scan.
    out : str or Path
        Folder to write to; files are named by arm and draw.

    Raises
    ------
    StudyError
        For an arm or a draw the protocol does not have.
    PatternError
        Where a file cannot be written.
    """
    plan = plan_study(protocol)
    row = next((row for row in plan.rows if row.arm.id == arm), None)
    if row is None:
        raise StudyError(
            f"The protocol has no arm {arm!r}.",
            str(protocol.path),
            f"Its arms: {', '.join(r.arm.id for r in plan.rows)}.",
        )
    if not 0 <= draw < max(1, row.draws):
        raise StudyError(
            f"Draw {draw} does not exist: the study makes {row.draws} of {arm}.",
            "--draw",
            f"Give a number from 0 to {row.draws - 1}.",
        )
    header = read_header(plan.scans[0].path)
    frames = header.shape[3] if len(header.shape) > 3 and plan.channel_axis is None else 0
    grid = pattern_grid(plan.axes, header.shape)
    frames = frames if frames > 1 else 0
    played = draw_of(protocol, row.arm, plan.scan_ids[0], grid, draw, frames)
    folder = Path(out)
    folder.mkdir(parents=True, exist_ok=True)
    files = tuple(
        write_table(played.pattern, folder / f"{arm}_draw{draw}{ending}")
        for ending in (".csv", ".json", ".nii.gz")
    )
    return Exported(arm, row.arm.label, draw, played, files)


def add_exported_row(folder: str | Path, protocol: Protocol, exported: Exported) -> dict[str, Any]:
    """Give a finished study's verdict a row for exactly the exported draw.

    The study ran this pattern on its first scan; it is run here on every other scan of that grid,
    so that the row speaks of one table on all scans, with no luck of the draw in it.

    Returns
    -------
    dict
        The results as written.

    Raises
    ------
    StudyError
        Where the folder holds no finished study, one whose draw is another pattern, or a scan has
        changed since.
    """
    results = load_results(Path(folder))
    ran = [u for u in results["units"] if u["arm"] == exported.arm and u["draw"] == exported.draw]
    table = exported.played.pattern.hash
    if table not in {u["pattern_hash"] for u in ran}:
        raise StudyError(
            f"The study in {folder} did not run this draw ({exported.arm}, draw {exported.draw}).",
            str(Path(folder) / "results.json"),
            "Run the protocol the table was exported from, then export again.",
        )
    identity = f"{exported.arm}-draw{exported.draw}"
    units = [
        {**plain(unit), "arm": identity}
        for unit in _on_every_scan(Path(folder), protocol, exported, results, ran)
    ]
    today = next((a["id"] for a in results["arms"] if a["today"]), None)
    by_arm = {identity: units}
    baseline = results.get("baseline", today)
    for other in [arm for arm in (today, baseline) if arm is not None]:
        by_arm[other] = [u for u in results["units"] if u["arm"] == other]
    seed = protocol.study.seed
    numbers = arm_numbers(by_arm, protocol.acceptance, today, seed, baseline=baseline)[identity]
    source = next(a for a in results["arms"] if a["id"] == exported.arm)
    row = {
        **source,
        "id": identity,
        "label": f"{exported.label}, draw {exported.draw} exported",
        "exported": {"arm": exported.arm, "draw": exported.draw, "hash": table},
        "acceleration": units[0]["acceleration"],
        "acceleration_in_shutter": units[0]["acceleration_in_shutter"],
        "acquired": units[0]["acquired"],
        "metrics": numbers.metrics,
        "against_today": numbers.comparisons,
        "against_baseline": numbers.differences,
        "verdict": numbers.verdict,
    }
    results["arms"] = [a for a in results["arms"] if a["id"] != identity] + [plain(row)]
    results["units"] = [u for u in results["units"] if u["arm"] != identity] + units
    write_json(Path(folder) / "results.json", results)
    return results


def _on_every_scan(
    folder: Path,
    protocol: Protocol,
    exported: Exported,
    results: dict[str, Any],
    ran: list[dict[str, Any]],
) -> list[dict[str, Any]]:
    """Units of the exported pattern: those the study ran, the others computed."""
    plan = plan_study(protocol)
    row = next(row for row in plan.rows if row.arm.id == exported.arm)
    records = {record["id"]: record for record in results["scans"]}
    table, units = exported.played.pattern.hash, []
    measures = protocol.measures()
    # Draws after the first lack the measures that recover again: then every scan runs anew.
    complete = exported.draw == 0 or measures is None or not measures.recoveries
    for scan_id in plan.scan_ids:
        record = records.get(scan_id)
        kept = next((u for u in ran if (u["scan"], u["pattern_hash"]) == (scan_id, table)), None)
        if kept is not None and complete:
            units.append(kept)
        elif record is not None:
            if pattern_grid(plan.axes, tuple(record["shape"])) != exported.played.pattern.grid:
                continue
            same = replace(plan, choice=PlaneChoice(tuple(record["planes"])))
            hashes = [records[i]["sha256"] if i in records else "" for i in plan.scan_ids]
            mine = next(
                unit
                for unit in same.units(folder, hashes, [row])
                if unit.scan_id == scan_id and unit.draw == exported.draw
            )
            mine = replace(mine, keep_maps=False, pattern_of=plan.scan_ids[0])
            done = run_unit_here(mine)
            units.append({k: v for k, v in done.items() if k not in ("timing", "maps")})
    return units
