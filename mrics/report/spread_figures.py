"""What a pattern does to a point, in detail: side lobes, wavelet scales, jumps of the order."""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.errors import PatternError
from mrics.report.colours import INK, SERIES
from mrics.report.pattern_figures import PatternPicture
from mrics.report.style_figures import figure_style, new_figure
from mrics.sampling import transform_spread
from mrics.sampling.ordered import Ordered


def spread_figure(picture: PatternPicture, played: Ordered) -> Any:
    """Histogram of the point spread, interference between wavelet scales, jumps between echoes."""
    with figure_style():
        figure = new_figure(9.4, 2.7)
        axes = figure.subplots(1, 3, width_ratios=(1.1, 1, 1.1))
        _histogram(axes[0], picture)
        _scales(axes[1], picture, figure)
        _jumps(axes[2], played)
    return figure


def spread_facts(picture: PatternPicture, played: Ordered) -> list[tuple[str, str]]:
    """The single numbers of a pattern, named."""
    facts = picture.spread
    settings = played.pattern.settings
    rows = [
        ("largest side lobe / peak", f"{facts.side_lobe:.4f}"),
        (
            "RMS away from the point / peak (equal for all patterns of this count)",
            _plain(facts.rms),
        ),
        ("largest value next to the point / peak", f"{facts.off_peak:.4f}"),
        ("largest gap (1-D: lines; 2-D: diameter of an empty circle)", f"{facts.largest_gap:.3g}"),
    ]
    if facts.incoherent_peak is not None:
        rows.append(("largest random part / peak", f"{facts.incoherent_peak:.4f}"))
    if facts.alias_distance is not None:
        rows.append(("distance to the nearest alias, voxels", f"{facts.alias_distance:.3g}"))
    if facts.captured_energy is not None:
        rows.append(("energy of the training scans captured", f"{facts.captured_energy:.4f}"))
    for key, name in (
        ("requested_count", "positions requested"),
        ("count_before_shots", "positions drawn, before whole shots"),
        ("count", "positions played"),
        ("best_gain", "gain of the best draw over the median one"),
        ("union_coverage", "positions covered by all frames together"),
    ):
        if settings.get(key) is not None:
            rows.append((name, _plain(settings[key])))
    if played.centre_ms is not None:
        rows.append(("centre of k-space at, ms", f"{played.centre_ms:g}"))
    rows.append(("shots", str(played.shots)))
    return rows


def _plain(value: Any) -> str:
    return f"{value:.4g}" if isinstance(value, float) else str(value)


def _histogram(axes: Any, picture: PatternPicture) -> None:
    counts, edges = picture.spread.histogram
    axes.stairs(counts, edges, color=SERIES[0], fill=True, alpha=0.6)
    axes.set_yscale("symlog", linthresh=1)
    axes.yaxis.set_major_formatter("{x:g}")
    axes.set_ylim(bottom=0)
    axes.set_xlabel("|point spread|, dB of the peak")
    axes.set_ylabel("voxels")
    axes.set_title("side lobes")


def _scales(axes: Any, picture: PatternPicture, figure: Any) -> None:
    try:
        found = transform_spread(picture.mask)
    except PatternError:
        axes.set_axis_off()
        axes.text(0.5, 0.5, "grid too small for\nwavelet scales", ha="center", va="center")
        return
    levels = 20 * np.log10(np.maximum(found.peak, 1e-3))
    image = axes.imshow(levels, cmap="cividis", vmin=-60, vmax=0)
    ticks = range(len(found.labels))
    short = [label.removeprefix("detail ").replace("approximation", "a") for label in found.labels]
    axes.set_xticks(ticks, short)
    axes.set_yticks(ticks, short)
    axes.grid(visible=False)
    axes.set_xlabel("onto scale (1 finest, a = rest)")
    axes.set_ylabel("from scale")
    axes.set_title("wavelet interference")
    figure.colorbar(image, ax=axes, shrink=0.9).set_label("dB")


def _jumps(axes: Any, played: Ordered) -> None:
    axes.set_title("jumps in k-space")
    axes.set_xlabel("k-space steps")
    axes.set_ylabel("share of jumps")
    shown = [
        (values, name, colour)
        for values, name, colour in (
            (played.echo_jumps, "echo to echo", SERIES[0]),
            (played.shot_jumps, "shot to shot", SERIES[1]),
        )
        if len(values)
    ]
    if not shown:
        axes.text(0.5, 0.5, "one position", ha="center", transform=axes.transAxes, color=INK)
        return
    largest = max(float(values.max()) for values, _, _ in shown)
    edges = np.linspace(0, max(1.0, largest), 25)
    for values, name, colour in shown:
        share = np.histogram(values, edges)[0] / len(values)
        axes.stairs(share, edges, label=f"{name}, median {np.median(values):.3g}", color=colour)
    axes.legend(loc="upper right", fontsize=7)
