"""Arm numbers from units: mean, range, worst slice, and what the acceptance limits say."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

from mrics.protocol.acceptance import Limit
from mrics.protocol.timing import minutes
from mrics.quality import METRICS

SCORED = ("nrmse", "psnr", "ssim", "hfen", "nrmse_complex")


def arm_metrics(units: Sequence[dict[str, Any]]) -> dict[str, dict[str, Any]]:
    """Every score of one arm over its units.

    The mean is over scans, of the mean over draws, of the mean over slices; ``min`` and ``max``
    are over all slices of all draws and scans; ``worst`` is the extreme in the bad direction, and
    ``worst_where`` says which scan, draw and slice. Slices without a value are left out.
    """
    metrics: dict[str, dict[str, Any]] = {}
    for name in SCORED:
        values = [
            (part[name], unit["scan"], unit["draw"], part["index"], part["frame"])
            for unit in units
            for part in unit["slices"]
            if part.get(name) is not None
        ]
        if not values:
            continue
        pick = max if METRICS[name].direction == "lower" else min
        worst = pick(values, key=lambda item: item[0])
        metrics[name] = {
            "mean": _mean(scan_means(units, name).values()),
            "min": min(v[0] for v in values),
            "max": max(v[0] for v in values),
            "interval": None,
            "worst": worst[0],
            "worst_where": {
                "scan": worst[1],
                "draw": worst[2],
                "slice": worst[3],
                "frame": worst[4],
            },
        }
    return metrics


def scan_means(units: Iterable[dict[str, Any]], name: str) -> dict[str, float]:
    """Mean of one score per scan: slices first, then draws."""
    draws: dict[str, list[float]] = {}
    for unit in units:
        values = [part[name] for part in unit["slices"] if part.get(name) is not None]
        if values:
            draws.setdefault(unit["scan"], []).append(_mean(values))
    return {scan: _mean(values) for scan, values in draws.items()}


def arm_verdict(
    metrics: dict[str, dict[str, Any]], limits: Sequence[Limit], n_scans: int
) -> dict[str, Any]:
    """What the limits say of one arm: each limit with its value and by how much it was kept."""
    rows = []
    for limit in limits:
        summary = metrics.get(limit.metric)
        value = None if summary is None else summary["worst" if limit.worst else "mean"]
        if value is None:
            rows.append(_row(limit, None, None, "undecided"))
            continue
        margin = value - limit.value if limit.side == "min" else limit.value - value
        rows.append(_row(limit, value, margin, "pass" if margin >= 0 else "fail"))
    states = {row["status"] for row in rows}
    if not rows:
        status = "undecided"
    elif "fail" in states:
        status = "fail"
    else:
        status = "undecided" if "undecided" in states else "pass"
    scans = "this scan" if n_scans == 1 else f"these {n_scans} scans"
    return {
        "status": status,
        "limits": rows,
        "confidence": f"observed on {scans} only; no interval beyond them is claimed",
    }


def overall_verdict(arms: Sequence[dict[str, Any]]) -> dict[str, Any]:
    """The fastest arm that passes every limit (the protocol in use today left out)."""
    candidates = [a for a in arms if not a["today"]]
    passing = [a for a in candidates if a["verdict"]["status"] == "pass"]
    if not any(a["verdict"]["limits"] for a in arms):
        return {
            "status": "undecided",
            "arm": None,
            "sentence": "No acceptance limits were given, so nothing is decided.",
        }
    if not passing:
        return {
            "status": "fail" if candidates else "undecided",
            "arm": None,
            "sentence": "No candidate passes every limit.",
        }
    best = min(passing, key=_speed_then_error)
    saved = best["full_scan_time_s"] - best["scan_time_s"]
    today = next((a for a in arms if a["today"]), None)
    sentence = (
        f"{best['label']} passes every limit on the scans studied: "
        f"{minutes(best['full_scan_time_s'])} fully sampled becomes "
        f"{minutes(best['scan_time_s'])} ({minutes(saved)} saved)"
    )
    if today is not None:
        gain = today["scan_time_s"] - best["scan_time_s"]
        word = "saved" if gain >= 0 else "lost"
        sentence += (
            f"; against today's {minutes(today['scan_time_s'])}, {minutes(abs(gain))} {word}"
        )
    return {"status": "pass", "arm": best["id"], "sentence": sentence + "."}


def _speed_then_error(arm: dict[str, Any]) -> tuple[float, float]:
    return (arm["scan_time_s"], arm["metrics"].get("nrmse", {}).get("mean", 0.0))


def _row(limit: Limit, value: float | None, margin: float | None, status: str) -> dict[str, Any]:
    return {
        "key": limit.key,
        "metric": limit.metric,
        "limit": limit.value,
        "value": value,
        "margin": margin,
        "status": status,
    }


def _mean(values: Iterable[float]) -> float:
    items = list(values)
    return sum(items) / len(items)
