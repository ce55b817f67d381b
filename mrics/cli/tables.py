"""What commands print: the plan as a table, a study's verdict in a few lines."""

from __future__ import annotations

import shutil
import textwrap
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from mrics.protocol import minutes

if TYPE_CHECKING:
    from mrics.recovery.dictionary import Dictionary
    from mrics.scan import Scan
    from mrics.scan.fitness import Inspection
    from mrics.study import Difference, Ranking, StudyPlan
    from mrics.study.as_is import Optimism

_WIDEST = 100


def columns() -> int:
    """Columns of a table: those of the terminal, 60 to 100; 100 where there is none."""
    return max(60, min(_WIDEST, shutil.get_terminal_size((_WIDEST, 24)).columns))


def _folded(lines: Sequence[str]) -> str:
    """Lines joined, those wider than the terminal folded; left whole where there is none."""
    width = max(60, shutil.get_terminal_size((10**6, 24)).columns)
    folded: list[str] = []
    for line in lines:
        indent = " " * (len(line) - len(line.lstrip()) + 4)
        folded += [line] if len(line) <= width else _wrap(line, width, indent)
    return "\n".join(folded)


def _wrap(line: str, width: int, indent: str) -> list[str]:
    return textwrap.wrap(
        line, width, subsequent_indent=indent, drop_whitespace=True, break_on_hyphens=False
    )


def plan_table(plan: StudyPlan) -> str:
    """The arms of a plan, as wide as :func:`columns` says."""
    width = columns()
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
    widths[0] = min(widths[0], width - sum(widths[1:]) - 2 * (len(head) - 1))
    lines = [plan.protocol.title[:width]]
    for line in (head, *rows):
        first = line[0] if len(line[0]) <= widths[0] else line[0][: widths[0] - 1] + "…"
        cells = [first.ljust(widths[0])]
        cells += [text.rjust(size) for text, size in zip(line[1:], widths[1:], strict=True)]
        lines.append("  ".join(cells).rstrip())
    for text in plan.findings():
        lines += textwrap.wrap(f"note: {text}", width, subsequent_indent="      ")
    return "\n".join(lines)


def ranking_table(ranking: Ranking) -> str:
    """Every pattern's d' and rank for both tasks, with the d' of noise alone below it."""
    tasks = ranking.tasks()
    least_name, rate, least_cell = 14, 6, 10
    lines = textwrap.wrap(
        "Ideal observer on the data themselves, no recovery: d' and rank of every pattern "
        f"(first draw; features of {ranking.contrast:g} %; background and noise of "
        f"{ranking.scan}, sigma {ranking.sigma:.3g}; {ranking.channels} channel(s))",
        columns(),
    )
    kinds = list(dict.fromkeys(kind for kind, _ in tasks))
    beside = least_name + rate + least_cell * len(tasks) <= columns()
    for group in [kinds] if beside else [[kind] for kind in kinds]:
        taken = [number for number, (kind, _) in enumerate(tasks) if kind in group]
        cell = min(12, (columns() - least_name - rate) // len(taken))
        longest = max(len(row["pattern"]) for row in ranking.rows)
        name = max(least_name, min(longest, columns() - rate - cell * len(taken)))
        each = cell * len(taken) // len(group)
        lines.append((" " * (name + rate) + "".join(kind.center(each) for kind in group)).rstrip())
        heads = "".join(f"{tasks[number][1]:g} mm".rjust(cell) for number in taken)
        lines.append(f"{'pattern'.ljust(name)}{'R'.rjust(rate)}{heads}")
        for pattern, rows in ranking.by_pattern().items():
            short = pattern if len(pattern) <= name else pattern[: name - 1] + "…"
            cells = [f"{rows[n]['d_prime']:.3g} #{rows[n]['rank']}" for n in taken]
            lines.append(
                f"{short.ljust(name)}{rows[0]['acceleration']:{rate}.2f}"
                + "".join(text.rjust(cell) for text in cells)
            )
            known = "".join(f"{rows[n]['noise_only']:.3g}   ".rjust(cell) for n in taken)
            lines.append(f"{'  noise only'.ljust(name + rate)}{known}".rstrip())
    lines += textwrap.wrap(
        "Ranked by d' in an anatomical background. \"Noise only\" is d' in a known background: it "
        "always prefers the centre of k-space and ranks nothing.",
        columns(),
    )
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
        advice = {one["advice"] for one in arm["verdict"]["limits"] if one.get("advice")}
        lines += [f"    {text}" for text in sorted(advice)]
        certificates = arm["certificates"]
        if certificates["reached"] < certificates["of"]:
            lines.append(
                f"    {certificates['of'] - certificates['reached']} of {certificates['of']} "
                "recoveries did not reach their tolerance"
            )
    for search in results.get("searches", []):
        looks = ", ".join(
            f"R {d['acceleration']:g} {d['status']} ({d['draws']} draws)"
            for d in search["decisions"]
        )
        best = "none passes" if search["arm"] is None else f"R = {search['acceleration']:g}"
        lines += textwrap.wrap(
            f"search {search['family']}: {looks}; fastest that passes: {best}",
            columns(),
            subsequent_indent="    ",
        )
        lines += [f"    {text}" for text in search["findings"]]
    for scan in results["scans"]:
        for finding in scan["findings"]:
            lines.append(f"warning: {scan['id']}: {finding['what']} ({finding['where']})")
    return _folded(lines)


def difference_lines(difference: Difference) -> str:
    """Two studies compared, section by section; sections without content are left out."""
    lines: list[str] = []
    for title, changes in (("protocol", difference.changes), ("scans", difference.scans)):
        if changes:
            lines.append(f"{title}:")
            lines += [f"  {c.key}: {_shown(c.before)} -> {_shown(c.after)}" for c in changes]
    for title, arms in (
        ("arms only in the first", difference.only_before),
        ("arms only in the second", difference.only_after),
    ):
        if arms:
            lines.append(f"{title}: {', '.join(arms)}")
    if difference.verdicts:
        lines.append("verdicts:")
        lines += [f"  {arm}: {a} -> {b}" for arm, a, b in difference.verdicts]
    if difference.moves:
        lines.append("means that moved:")
        for move in difference.moves:
            how = "no interval in one of them"
            if move.beyond is not None:
                how = "the intervals do not overlap" if move.beyond else "within the intervals"
            lines.append(f"  {move.arm}, {move.metric}: {move.before:g} -> {move.after:g}, {how}")
    return _folded(lines) if lines else "no difference"


_REMEDIES = {
    "crop_kspace": "k-space cropped to what was measured",
    "acquired_region": "k-space mirrored where its higher side is empty",
    "add_phase": "an invented smooth phase",
    "add_noise": "white noise of the scan's own sigma",
}


def inspection_lines(scan: Scan, inspection: Inspection) -> str:
    """A scan's findings: what, where, how sure, which way it biases a study, what to do."""
    shape = " x ".join(str(n) for n in scan.shape)
    noise = f"SNR {inspection.snr:.3g} (sigma {inspection.noise.sigma:.3g})"
    lines = [f"{scan.name}: {shape}, {scan.complex_source}, {noise}"]
    for finding in inspection.findings:
        parts = [
            f"{finding.code} ({finding.where}): {finding.what}",
            f"statistic {finding.statistic:.4g}, threshold {finding.threshold:.4g}",
            finding.bias,
            f"what to do: {finding.advice}",
        ]
        for number, part in enumerate(parts):
            lines += _wrapped(part, "  " if number == 0 else "    ")
    if not inspection.findings:
        lines.append("  nothing found")
    for text in inspection.cannot_be_told:
        lines += _wrapped(f"cannot be told: {text}", "  ")
    asked = {finding.remedy for finding in inspection.findings}
    offered = [words for remedy, words in _REMEDIES.items() if remedy in asked]
    if offered:
        lines += _wrapped(
            f"remedies: --remedied FILE writes the scan with {', '.join(offered)}; nothing of it "
            "is done to a study unasked",
            "  ",
        )
    return "\n".join(lines)


def optimism_lines(rows: Sequence[Optimism]) -> str:
    """Scans as they are against scans remedied, a line per arm and metric."""
    lines = ["arm, metric: as is, remedied, difference [95 % interval]"]
    for row in rows:
        interval = "" if row.low is None else f" [{row.low:.4g}, {row.high:.4g}]"
        side = "flattered" if row.flatters else "not flattered"
        if row.low is not None and row.high is not None and row.low <= 0 <= row.high:
            side = "no clear difference"
        lines.append(
            f"{row.arm}, {row.metric}: {row.as_is:.4g}, {row.remedied:.4g}, "
            f"{row.difference:+.4g}{interval}, {side}"
        )
    return _folded(lines)


def _wrapped(text: str, indent: str) -> list[str]:
    return textwrap.wrap(text, columns(), initial_indent=indent, subsequent_indent=indent + "  ")


def certificate_lines(content: dict[str, Any]) -> str:
    """A recovery's certificate in a few lines."""
    one = content["certificate"]
    reached = "reached" if one["reached"] else "NOT reached"
    lines = [
        f"method: {one['method']}, {one['iterations']} iterations",
        f"data: {content['channels']} channel(s), R = {content['acceleration']:.3g}",
        f"noise: sigma {content['sigma']:.4g}",
    ]
    lines += [f"data: {text}" for text in content["notes"]]
    if one["weight"] is not None:
        lines.append(f"weight: {one['weight']:.4g} {one['weight_unit']} ({one['weight_rule']})")
    if one["optimality"] is not None:
        lines.append(f"optimality: {one['optimality']:.3g}, {one['tolerance']:.3g} {reached}")
    if one["note"]:
        lines.append(f"note: {one['note']}")
    return _folded(lines)


def dictionary_lines(dictionary: Dictionary) -> str:
    """What a training made, in a few lines."""
    made = dictionary.provenance
    size = " x ".join(map(str, dictionary.patch))
    kind = "complex" if dictionary.atoms.dtype.kind == "c" else "real"
    half, most = np.quantile(dictionary.residuals, (0.5, 0.95))
    where = "patches not learned from" if made["residual_of_unseen_patches"] else "patches"
    return _folded(
        [
            f"atoms: {len(dictionary.atoms)} {kind}, patches {size}, "
            f"{dictionary.layers} plane(s) in a patch",
            f"learned from: {made['patches']} patches of "
            f"{', '.join(scan['name'] for scan in made['scans'])}",
            f"residual energy above noise at {made['residual_sparsity']} atoms: "
            f"median {100 * half:.2g} %, 95 % of {where} below {100 * most:.2g} %",
        ]
    )


def _shown(value: Any) -> str:
    return "none" if value is None else str(value)
