"""Charts of numbers: metric against acceleration, metric by slice."""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.report.colours import FAIL, INK, MARKERS, MUTED, SERIES
from mrics.report.folder import StudyFolder
from mrics.report.style_figures import figure_style, new_figure
from mrics.report.summary import Limit, drawn_limits, exact_arms, limits_of, with_intervals
from mrics.report.words import MetricWords, metric_value


def family_of(arm: dict[str, Any]) -> str:
    """What arms of one curve share: pattern family and recovery."""
    return f"{arm.get('sampling', '')}, {arm.get('recovery', '')}"


def families(study: StudyFolder) -> dict[str, tuple[str, str]]:
    """Colour and marker of every family, in the order of the arms."""
    names = list(dict.fromkeys(family_of(a) for a in study.arms))
    return {
        n: (SERIES[i % len(SERIES)], MARKERS[(i + i // len(SERIES)) % len(MARKERS)])
        for i, n in enumerate(names)
    }


def against_acceleration(study: StudyFolder, metrics: tuple[MetricWords, ...]) -> Any:
    """Figure of :func:`draw_against_acceleration`."""
    with figure_style():
        rows = -(-max(1, len(metrics)) // 2)
        legend_rows = -(-(len(families(study)) + 3) // 2)
        figure = new_figure(7.2, 2.35 * rows + 0.2 * legend_rows + 0.1)
        draw_against_acceleration(figure, study, metrics)
    return figure


def draw_against_acceleration(
    figure: Any, study: StudyFolder, metrics: tuple[MetricWords, ...]
) -> None:
    """Mean and range of metrics against achieved acceleration, one panel per metric.

    Thin bars run from the worst to the best slice of any draw and scan, thick bars are confidence
    intervals, dashed lines are acceptance limits with the failing side hatched.
    """
    looks = families(study)
    count = max(1, len(metrics))
    columns = 2 if count > 1 else 1
    grid = figure.subplots(-(-count // columns), columns, squeeze=False)
    for axes, metric in zip(grid.flat, metrics, strict=False):
        _against_panel(axes, study, metric, looks)
    for axes in list(grid.flat)[count:]:
        axes.set_axis_off()
    for axes in grid.flat[max(0, count - columns) : count]:
        axes.set_xlabel("acceleration R, achieved")
    handles, labels = _legend(study, looks)
    figure.legend(handles, labels, loc="outside lower left", ncols=2, handlelength=1.6)


def _against_panel(axes: Any, study: StudyFolder, metric: MetricWords, looks: Any) -> None:
    reached = [float(a["acceleration"]) for a in study.arms if a.get("acceleration")]
    step = 0.012 * (np.log(max(reached) / min(reached)) or 0.5) if reached else 0.01
    order = list(looks)
    beside = exact_arms(study) if len(exact_arms(study)) < len(study.arms) else set()
    curves: dict[str, list[tuple[float, float]]] = {}
    for arm in study.arms:
        row = (arm.get("metrics") or {}).get(metric.key)
        if not row or row.get("mean") is None:
            continue
        family = family_of(arm)
        colour, marker = looks[family]
        aside = np.exp(step * (order.index(family) - (len(order) - 1) / 2))
        where = float(arm["acceleration"]) * aside
        axes.plot([where, where], [row["min"], row["max"]], color=colour, lw=0.9, zorder=2)
        if row.get("interval"):
            ends = [row["interval"]["low"], row["interval"]["high"]]
            axes.plot([where, where], ends, color=colour, lw=4, alpha=0.45, zorder=2)
        axes.plot(
            [where], [row["mean"]], marker, color=colour, ms=5.5, mec="white", mew=0.6, zorder=4
        )
        if arm.get("today"):
            axes.plot([where], [row["mean"]], "o", ms=11, mfc="none", mec=INK, mew=1.2, zorder=3)
        if arm["id"] in beside:
            continue
        curves.setdefault(family, []).append((where, row["mean"]))
    for family, points in curves.items():
        points.sort()
        axes.plot(*zip(*points, strict=True), color=looks[family][0], lw=1.0, alpha=0.75, zorder=1)
    axes.margins(y=0.1)
    axes.set_xscale("log")
    _plain_ticks(axes, reached)
    axes.set_title(metric.axis + _better(metric))
    axes.grid(axis="y")
    if beside:
        _scale_without(axes, study, metric.key, beside)
    draw_limits(axes, drawn_limits(study, metric.key))


def _scale_without(axes: Any, study: StudyFolder, key: str, beside: set[str]) -> None:
    """Scale by the arms that lose something; exact ones beyond it are written at its edge."""
    rows = {a["id"]: (a["metrics"].get(key), a) for a in study.arms if a.get("metrics")}
    shown = [r for i, (r, _) in rows.items() if i not in beside and r and r["mean"] is not None]
    if not shown:
        return
    low, high = min(r["min"] for r in shown), max(r["max"] for r in shown)
    low, high = with_intervals(low, high, shown)
    pad = 0.08 * (high - low or abs(high) or 1.0)
    exact = [rows[i][0]["mean"] for i in beside if rows[i][0]]
    near = [mean for mean in exact if low - 3 * pad <= mean <= high + 3 * pad]
    low, high = min([low, *near]), max([high, *near])
    axes.set_ylim(low - pad, high + pad)
    for identity in beside:
        row, arm = rows[identity]
        if not row or low - pad <= row["mean"] <= high + pad:
            continue
        above = row["mean"] > high
        where = (float(arm["acceleration"]), 1.0 if above else 0.0)
        text = f" {metric_value(key, row['mean'])} {'↑' if above else '↓'}"
        look = {"fontsize": 8, "va": "top" if above else "bottom", "color": MUTED}
        axes.text(*where, text, transform=axes.get_xaxis_transform(), **look)


def _better(metric: MetricWords) -> str:
    return ", lower is better" if metric.better == "low" else ", higher is better"


def _plain_ticks(axes: Any, reached: list[float]) -> None:
    """Ticks at plain numbers on a logarithmic axis."""
    from matplotlib.ticker import FixedLocator, FuncFormatter, NullLocator

    low, high = (min(reached), max(reached)) if reached else (1.0, 2.0)
    pad = max((high / low) ** 0.08, 1.04)
    axes.set_xlim(low / pad, high * pad)
    candidates = [1, 1.5, 2, 2.5, 3, 4, 5, 6, 8, 10, 12, 16, 20, 30, 40, 60]
    inside = [c for c in candidates if low / pad <= c <= high * pad] or [round(low, 1)]
    axes.xaxis.set_major_locator(FixedLocator(inside))
    axes.xaxis.set_major_formatter(FuncFormatter(lambda x, _: f"{x:g}"))
    axes.xaxis.set_minor_locator(NullLocator())


def draw_limits(axes: Any, limits: list[Limit]) -> None:
    """Acceptance limits as dashed lines, the failing side hatched."""
    low, high = axes.get_ylim()
    for limit in limits:
        margin = 0.06 * (high - low)
        low, high = min(low, limit.value - margin), max(high, limit.value + margin)
    axes.set_ylim(low, high)
    for limit in limits:
        style = ":" if limit.kind == "worst" else "--"
        axes.axhline(limit.value, color=FAIL, lw=1.1, ls=style, zorder=1.5)
        ends = (low, limit.value) if limit.at_least else (limit.value, high)
        if limit.kind == "mean":
            look = {"facecolor": "none", "edgecolor": FAIL, "hatch": "///", "lw": 0, "alpha": 0.35}
            axes.axhspan(*ends, zorder=0.5, **look)


def _legend(study: StudyFolder, looks: dict[str, tuple[str, str]]) -> tuple[list[Any], list[str]]:
    from matplotlib.lines import Line2D

    handles = [Line2D([], [], color=c, marker=m, ms=5.5, lw=1.0) for c, m in looks.values()]
    labels = list(looks)
    if any(a.get("today") for a in study.arms):
        handles.append(Line2D([], [], ls="", marker="o", ms=10, mfc="none", mec=INK, mew=1.2))
        labels.append("in use today")
    limits = limits_of(study)
    if any(x.kind == "mean" for x in limits):
        handles.append(Line2D([], [], color=FAIL, ls="--", lw=1.1))
        labels.append("acceptance limit, hatched side fails")
    if any(x.kind == "worst" for x in limits):
        handles.append(Line2D([], [], color=FAIL, ls=":", lw=1.1))
        labels.append("limit on the worst slice")
    return handles, labels


def by_slice(study: StudyFolder, arm: dict[str, Any], metrics: tuple[MetricWords, ...]) -> Any:
    """Figure of :func:`draw_by_slice`."""
    with figure_style():
        figure = new_figure(7.2, 2.3 + 0.22 * -(-max(1, len(study.scans)) // 3))
        draw_by_slice(figure, study, arm, metrics)
    return figure


def draw_by_slice(
    figure: Any, study: StudyFolder, arm: dict[str, Any], metrics: tuple[MetricWords, ...]
) -> None:
    """Metrics of one arm by slice: mean over draws (and frames) as points, range as a band."""
    scans = [s for s in study.scans if study.units(arm["id"], s["id"])]
    letter = scans[0]["plane_axis"] if scans else "?"
    grid = figure.subplots(1, max(1, len(metrics)), squeeze=False)
    for axes, metric in zip(grid.flat, metrics, strict=False):
        for position, scan in enumerate(scans):
            _slice_curve(axes, study.units(arm["id"], scan["id"]), metric.key, position)
        axes.set_title(metric.axis + _better(metric).replace(", ", "\n"))
        axes.set_xlabel(f"slice (index along {letter})")
        axes.grid(axis="y")
        axes.xaxis.get_major_locator().set_params(integer=True, nbins=6)
        draw_limits(axes, drawn_limits(study, metric.key))
    handles, labels = _scan_legend(scans)
    figure.legend(handles, labels, loc="outside lower left", ncols=3, handlelength=1.6)


def _slice_curve(axes: Any, units: list[dict[str, Any]], key: str, position: int) -> None:
    values: dict[int, list[float]] = {}
    for unit in units:
        for row in unit["slices"]:
            if row.get(key) is not None and np.isfinite(row[key]):
                values.setdefault(int(row["index"]), []).append(float(row[key]))
    if not values:
        return
    colour, marker = SERIES[position % len(SERIES)], MARKERS[position % len(MARKERS)]
    index = sorted(values)
    mean = [float(np.mean(values[i])) for i in index]
    size = 4.5 if len(index) < 60 else 2
    axes.plot(index, mean, marker=marker, ms=size, mec="white", mew=0.5, lw=1.0, color=colour)
    if any(len(v) > 1 for v in values.values()):
        low, high = [min(values[i]) for i in index], [max(values[i]) for i in index]
        if len(index) > 1:
            axes.fill_between(index, low, high, color=colour, alpha=0.18, lw=0)
        else:
            axes.plot([index[0]] * 2, [low[0], high[0]], color=colour, lw=1)


def _scan_legend(scans: list[dict[str, Any]]) -> tuple[list[Any], list[str]]:
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    handles: list[Any] = []
    labels = []
    for position, scan in enumerate(scans):
        colour, marker = SERIES[position % len(SERIES)], MARKERS[position % len(MARKERS)]
        handles.append(Line2D([], [], color=colour, marker=marker, ms=4.5, lw=1.0))
        labels.append(str(scan.get("name") or scan["id"]))
    handles.append(Patch(facecolor=MUTED, alpha=0.3))
    labels.append("range over draws")
    return handles, labels
