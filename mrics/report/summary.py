"""What the page says of a study, taken from results.json without drawing anything."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from mrics.report.folder import StudyFolder
from mrics.report.words import MetricWords, metric_words, number, numbered

_ORDER = ("nrmse", "psnr", "ssim", "hfen")


@dataclass(frozen=True)
class RangeMark:
    """One metric of one arm, placed on a scale from 0 to 100 shared by all arms.

    Attributes
    ----------
    mean, low, high : float
        Mean, smallest and largest slice value.
    interval : tuple of float or None
        Confidence interval, where the study states one.
    places : dict
        Positions (0-100) of mean, low, high, interval_low, interval_high and limits.
    failed : bool
        Whether a limit on this metric failed.
    text : str
        Sentence for a screen reader and for the tooltip.
    """

    mean: float
    low: float
    high: float
    interval: tuple[float, float] | None
    places: dict[str, Any]
    failed: bool
    text: str


@dataclass(frozen=True)
class Limit:
    """One acceptance limit of the protocol.

    Attributes
    ----------
    key, metric : str
        As written in the protocol, and the metric it limits.
    kind : str
        "mean", "worst" (slice), "margin" or "equivalence" (difference to another arm).
    at_least : bool
        True where values above the limit pass.
    value : float
        The limit.
    """

    key: str
    metric: str
    kind: str
    at_least: bool
    value: float


def limits_of(study: StudyFolder) -> tuple[Limit, ...]:
    """Acceptance limits, from the verdicts of the arms (every arm lists the same ones)."""
    seen: dict[str, Limit] = {}
    for arm in study.arms:
        for item in (arm.get("verdict") or {}).get("limits") or []:
            limit = _limit(str(item["key"]), item.get("limit"))
            if limit is not None:
                seen.setdefault(limit.key, limit)
    return tuple(seen.values())


def drawn_limits(study: StudyFolder, metric: str) -> list[Limit]:
    """Limits on the values of a metric themselves, not on differences of arms."""
    return [x for x in limits_of(study) if x.metric == metric and x.kind in ("mean", "worst")]


def _limit(key: str, value: Any) -> Limit | None:
    """What a key of the acceptance table limits; None for one that this version does not know."""
    from mrics.quality import acceptance_keys

    known = acceptance_keys().get(key)
    if known is None or not isinstance(value, (int, float)):
        return None
    return Limit(key, known.metric, known.kind, known.side == "min", float(value))


def metrics_of(study: StudyFolder) -> tuple[MetricWords, ...]:
    """Metrics that any arm has, the four of the first page first."""
    keys: dict[str, None] = {}
    for arm in study.arms:
        keys.update(dict.fromkeys(arm.get("metrics") or {}))
    ordered = [k for k in _ORDER if k in keys] + [k for k in keys if k not in _ORDER]
    return tuple(metric_words(k) for k in ordered)


def charted_metrics(study: StudyFolder) -> tuple[MetricWords, ...]:
    """Metrics that charts show: those with limits, then the rest of the four of the first page."""
    limited = {limit.metric for limit in limits_of(study)}
    shown = [m for m in metrics_of(study) if m.key in _ORDER or m.key in limited]
    return tuple(sorted(shown, key=lambda m: m.key not in limited))


def first_metric(study: StudyFolder) -> str:
    """The metric that chooses which slices are shown: the first limited one, else NRMSE."""
    shown = [m.key for m in metrics_of(study)]
    for limit in limits_of(study):
        if limit.metric in shown:
            return limit.metric
    return "nrmse" if "nrmse" in shown or not shown else shown[0]


def exact_arms(study: StudyFolder) -> set[str]:
    """Arms that give the reference back to rounding (the full scan): scales leave them out."""
    return {a["id"] for a in study.arms if _has(a, "nrmse") and a["metrics"]["nrmse"]["max"] < 1e-4}


def with_intervals(low: float, high: float, rows: list[dict[str, Any]]) -> tuple[float, float]:
    """A scale widened to hold confidence intervals, by half its length on each side at most."""
    spare = 0.5 * (high - low)
    ends = [row["interval"][end] for row in rows if row.get("interval") for end in ("low", "high")]
    return (
        max(low - spare, min([low, *ends])),
        min(high + spare, max([high, *ends])),
    )


def range_marks(study: StudyFolder, metric: MetricWords) -> dict[str, RangeMark]:
    """Range marks of one metric for every arm that has it, on one scale."""
    from mrics.report.words import metric_value

    rows = {a["id"]: a["metrics"][metric.key] for a in study.arms if _has(a, metric.key)}
    limits = drawn_limits(study, metric.key)
    beside = exact_arms(study)
    counted = [r for i, r in rows.items() if i not in beside] or list(rows.values())
    values = [v for r in counted for v in (r["min"], r["max"])] + [x.value for x in limits]
    if not values:
        return {}
    low, high = with_intervals(min(values), max(values), counted)
    span = (high - low) or abs(high) or 1.0

    def place(value: float) -> float:
        return round(min(99.0, max(1.0, 3 + 94 * (value - low) / span)), 2)

    out = {}
    for arm in study.arms:
        if arm["id"] not in rows:
            continue
        row = rows[arm["id"]]
        interval = row.get("interval")
        ends = (interval["low"], interval["high"]) if interval else None
        failed = any(
            x["status"] == "fail" and _limit_metric(x["key"]) == metric.key
            for x in (arm.get("verdict") or {}).get("limits") or []
        )
        places: dict[str, Any] = {k: place(row[k]) for k in ("mean", "min", "max")}
        places["limits"] = [(place(x.value), x.kind) for x in limits]
        if ends:
            places["interval"] = (place(ends[0]), place(ends[1]))
        shown = {k: metric_value(metric.key, row[k]) for k in ("mean", "min", "max")}
        text = (
            f"{metric.label}: mean {shown['mean']}, range over draws and slices "
            f"{shown['min']} to {shown['max']}"
        )
        if interval:
            text += (
                f", {100 * interval['level']:g} % interval over {interval['over']} "
                f"{metric_value(metric.key, ends[0])} to {metric_value(metric.key, ends[1])}"
                if ends
                else ""
            )
        out[arm["id"]] = RangeMark(row["mean"], row["min"], row["max"], ends, places, failed, text)
    return out


def _has(arm: dict[str, Any], key: str) -> bool:
    row = (arm.get("metrics") or {}).get(key) or {}
    return row.get("mean") is not None


def _limit_metric(key: str) -> str:
    limit = _limit(key, 0.0)
    return limit.metric if limit else key


def unfinished(study: StudyFolder) -> list[tuple[str, str]]:
    """(arm label, scan name) of every arm and scan without one finished unit."""
    return [
        (str(arm["label"]), str(scan.get("name") or scan["id"]))
        for arm in study.arms
        for scan in study.scans
        if not study.units(arm["id"], scan["id"])
    ]


def shown_slices(study: StudyFolder, arm: str, scan: str, draw: int | None) -> dict[str, Any]:
    """Worst and median slice of one unit by :func:`first_metric`.

    Returns
    -------
    dict
        Keys "worst" and "median", each the slice's entry in results.json; empty without units.
    """
    key = first_metric(study)
    units = [u for u in study.units(arm, scan) if draw is None or u["draw"] == draw]
    if not units:
        return {}
    rows = [s for s in units[0]["slices"] if s.get(key) is not None]
    if not rows:
        return {}
    rows.sort(key=lambda s: s[key], reverse=metric_words(key).better == "low")
    return {"worst": rows[0], "median": rows[len(rows) // 2]}


def worst_slices(study: StudyFolder, arm: str, count: int = 10) -> list[dict[str, Any]]:
    """The worst slices of an arm over scans and draws, by :func:`first_metric`.

    Returns
    -------
    list of dict
        Entries of results.json with "scan" and "draw" added, worst first.
    """
    key = first_metric(study)
    rows = [
        {**row, "scan": unit["scan"], "draw": unit["draw"]}
        for unit in study.units(arm)
        for row in unit["slices"]
        if row.get(key) is not None
    ]
    rows.sort(key=lambda r: r[key], reverse=metric_words(key).better == "low")
    return rows[:count]


def unreached(study: StudyFolder) -> list[dict[str, Any]]:
    """Arms whose recoveries did not all reach their stopping measure, or are not certified.

    Returns
    -------
    list of dict
        "label" of the arm, and "told": what its certificates say, in words.
    """
    rows = []
    for arm in study.arms:
        units = [u for u in study.units(arm["id"]) if u.get("certificate")]
        short = [u["certificate"] for u in units if not u["certificate"].get("reached", True)]
        loose = [u["certificate"] for u in units if not u["certificate"].get("certified", True)]
        if not short and not loose:
            continue
        told = []
        if short:
            told.append(
                f"{len(short)} of {numbered(len(units), 'recovery', 'recoveries')} stopped short"
            )
            if short[0].get("tolerance") is not None:
                worst = max(c.get("optimality") or 0.0 for c in short)
                asked = number(short[0]["tolerance"], 2)
                told[0] += f" (measure {number(worst, 2)}, asked {asked})"
        notes = sorted({c.get("note") for c in (short or loose)} - {"", None})
        if loose and not any("not certified" in str(note) for note in notes):
            told.append("not certified")
        rows.append({"label": arm["label"], "told": told + notes})
    return rows
