"""The page of two studies side by side."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from mrics.report.rendering import render, write_page
from mrics.study import compare_studies, load_results


def write_compare_page(before: str | Path, after: str | Path, path: str | Path) -> Path:
    """Write what changed between two studies: protocol, scans, verdicts, numbers.

    Parameters
    ----------
    before, after : str or Path
        Folders of finished studies.
    path : str or Path
        HTML file to write.

    Raises
    ------
    StudyError
        Where a folder holds no finished study, or one of a newer version.
    ReportError
        Where the page cannot be written.
    """
    difference = compare_studies(before, after)
    sides = [_side(Path(folder)) for folder in (before, after)]
    labels: dict[str, str] = {}
    for side in sides:
        labels |= side["labels"]
    moves: dict[str, list[Any]] = {}
    for move in difference.moves:
        moves.setdefault(move.arm, []).append(move)
    text = render("compare.html", difference=difference, sides=sides, labels=labels, moves=moves)
    return write_page(Path(path), text)


def _side(folder: Path) -> dict[str, Any]:
    """Head of one study; the folder's own name alone, no path."""
    results = load_results(folder)
    return {
        "name": folder.resolve().name,
        "title": results["protocol"].get("title") or "Untitled protocol",
        "verdict": results.get("verdict") or {},
        "mrics": results["mrics"],
        "scans": len(results["scans"]),
        "labels": {arm["id"]: arm["label"] for arm in results["arms"]},
    }
