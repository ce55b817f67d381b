"""The answer of a study in a few sentences: what passes, what it saves, what survives."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from mrics.protocol import minutes

#: share of its contrast that a feature has to keep where the protocol sets no limit (a convention
#: of this tool, no source)
KEPT_LEVEL = 0.8


def smallest_kept(units: Sequence[dict[str, Any]], level: float) -> list[dict[str, Any]]:
    """Smallest inserted feature that keeps ``level`` of its contrast, for each shape and contrast.

    Parameters
    ----------
    units : sequence of unit results
        Of one arm; shares are averaged over those with features.
    level : float
        Share of the contrast that counts as kept.

    Returns
    -------
    list of dict
        ``shape``, ``contrast`` (per cent), ``level``, ``size_mm``: a size counts only where every
        larger one is kept too; None where not even ``largest_mm`` is.
    """
    shares: dict[tuple[str, float], dict[float, list[float]]] = {}
    for unit in units:
        for row in (unit.get("measures") or {}).get("features") or []:
            if row.get("retained") is not None and row.get("nominal_mm") is not None:
                sizes = shares.setdefault((row["shape"], float(row["contrast"])), {})
                sizes.setdefault(float(row["nominal_mm"]), []).append(float(row["retained"]))
    found = []
    for (shape, contrast), sizes in shares.items():
        kept = None
        for size in sorted(sizes, reverse=True):
            if np.mean(sizes[size]) < level:
                break
            kept = size
        found.append(
            {
                "shape": shape,
                "contrast": contrast,
                "level": level,
                "size_mm": kept,
                "largest_mm": max(sizes),
            }
        )
    return found


def overall_verdict(arms: Sequence[dict[str, Any]], scans: int) -> dict[str, Any]:
    """The fastest candidate that passes every limit (neither today's arm nor the full scan).

    Parameters
    ----------
    arms : sequence of arm records
        With their verdicts, times and ``smallest_kept``.
    scans : int
        Scans studied.
    """
    if not any(a["verdict"]["limits"] for a in arms):
        return {
            "status": "undecided",
            "arm": None,
            "sentence": "No acceptance limits were given, so nothing is decided.",
        }
    candidates = [a for a in arms if not a["today"] and not a.get("full_scan")]
    passing = [a for a in candidates if a["verdict"]["status"].startswith("pass")]
    open_arms = [a for a in candidates if a["verdict"]["status"] == "undecided"]
    if not passing:
        sentence = "No candidate passes every limit."
        if open_arms:
            sentence += f" Undecided, as the interval holds the limit: {_listed(open_arms)}."
        return {
            "status": "undecided" if open_arms else "fail",
            "arm": None,
            "sentence": sentence,
        }
    best = min(passing, key=_speed_then_error)
    full, mine = best["full_scan_time_s"], best["scan_time_s"]
    studied = "the scan studied" if scans == 1 else f"{scans} scans"
    sentence = (
        f"{best['label']} passes every limit on {studied}: {minutes(full)} fully sampled becomes "
        f"{minutes(mine)}, {minutes(full - mine)} saved"
    )
    today = next((a for a in arms if a["today"]), None)
    if today is not None:
        gain = today["scan_time_s"] - mine
        word = "saved" if gain >= 0 else "lost"
        sentence += (
            f"; against today's {minutes(today['scan_time_s'])}, {minutes(abs(gain))} {word}"
        )
    sentence += f".{_features(best.get('smallest_kept') or [])}"
    faster = [a for a in open_arms if a["scan_time_s"] < mine]
    if faster:
        sentence += f" Faster but undecided: {_listed(faster)}."
    return {"status": best["verdict"]["status"], "arm": best["id"], "sentence": sentence}


def _features(kept: Sequence[dict[str, Any]]) -> str:
    """Sentences on the smallest features that are kept and on those that are not."""
    text = ""
    survivors = [one for one in kept if one["size_mm"] is not None]
    if survivors:
        named = "; ".join(_named(one, one["size_mm"]) for one in survivors)
        word = "feature" if len(survivors) == 1 else "features"
        text += f" Smallest {word} kept to {100 * survivors[0]['level']:g} %: {named}."
    lost = [one for one in kept if one["size_mm"] is None]
    if lost:
        named = "; ".join(_named(one, one["largest_mm"]) for one in lost)
        text += f" Not kept, though the largest tried: {named}."
    return text


def _named(one: dict[str, Any], size: float) -> str:
    contrast = f"{one['contrast']:g}".replace("-", "−")
    return f"{one['shape']} of {size:g} mm at {contrast} % contrast"


def _listed(arms: Sequence[dict[str, Any]]) -> str:
    return "; ".join(a["label"] for a in arms)


def _speed_then_error(arm: dict[str, Any]) -> tuple[float, float]:
    return (arm["scan_time_s"], arm["metrics"].get("nrmse", {}).get("mean", 0.0))
