"""What commands print: the plan as a table, a study's verdict in a few lines."""

from __future__ import annotations

import textwrap
from typing import Any

from mrics.protocol import minutes
from mrics.study import StudyPlan

WIDTH = 100


def plan_table(plan: StudyPlan) -> str:
    """The arms of a plan, at most 100 columns wide."""
    head = ("arm", "acquired", "R", "calib.", "time", "full", "saved")
    rows = []
    for row in plan.rows:
        timing = row.timing
        saved = timing.full_scan_time_s - timing.scan_time_s
        rows.append(
            (
                row.arm.label,
                str(row.pattern.acquired),
                f"{row.pattern.acceleration:.2f}",
                f"{100 * row.calibration_share:.0f} %",
                minutes(timing.scan_time_s),
                minutes(timing.full_scan_time_s),
                ("-" if saved < 0 else "") + minutes(abs(saved)),
            )
        )
    widths = [max(len(line[c]) for line in (head, *rows)) for c in range(len(head))]
    widths[0] = min(widths[0], WIDTH - sum(widths[1:]) - 2 * (len(head) - 1))
    lines = [plan.protocol.title[:WIDTH]]
    for line in (head, *rows):
        first = line[0] if len(line[0]) <= widths[0] else line[0][: widths[0] - 1] + "…"
        cells = [first.ljust(widths[0])]
        cells += [text.rjust(width) for text, width in zip(line[1:], widths[1:], strict=True)]
        lines.append("  ".join(cells).rstrip())
    for text in plan.findings():
        lines += textwrap.wrap(f"note: {text}", WIDTH, subsequent_indent="      ")
    return "\n".join(lines)


def verdict_lines(results: dict[str, Any]) -> str:
    """The verdict, each arm in a line, and what was found about the scans."""
    lines = [results["protocol"]["title"], f"verdict: {results['verdict']['sentence']}"]
    width = min(56, max(len(arm["label"]) for arm in results["arms"]))
    for arm in results["arms"]:
        metrics = arm["metrics"]
        scores = "  ".join(
            f"{name} {metrics[name]['mean']:.{digits}f}"
            for name, digits in (("nrmse", 4), ("ssim", 4), ("psnr", 1))
            if metrics.get(name, {}).get("mean") is not None
        )
        lines.append(
            f"  {arm['label'][:width].ljust(width)}  {minutes(arm['scan_time_s']):>6}  "
            f"{arm['verdict']['status']:<9} {scores}"
        )
        certificates = arm["certificates"]
        if certificates["reached"] < certificates["of"]:
            lines.append(
                f"    {certificates['of'] - certificates['reached']} of {certificates['of']} "
                "recoveries did not reach their tolerance"
            )
    for scan in results["scans"]:
        for finding in scan["findings"]:
            lines.append(f"warning: {scan['id']}: {finding['what']} ({finding['where']})")
    return "\n".join(lines)
