"""Partial Fourier: one side of k-space was not measured and left empty."""

from __future__ import annotations

from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.view import DETAIL_DB, PROFILE_DB, ScanView
from mrics.scan.fitness.zero_fill import SYMMETRY, measured_matrix
from mrics.scan.volume import LETTERS

# Step in the detail of a magnitude image, dB: half of the amplitude is gone beyond it.
STEP_DB = 2.8
# Steepest decline after the step, dB from zero to the largest frequency: filters go on falling.
STEEPEST_DB = -40.0
_ENDS = (0.2, 0.82)


def partial_fourier(view: ScanView) -> tuple[Finding, ...]:
    """K-space along an axis ends early on one side only.

    With phase, the profile of k-space is empty beyond the last line of that side. In a magnitude
    image both sides look alike, but the detail beyond the missing part has half its amplitude:
    the spectrum in tissue falls by 3 to 8 dB at once and then goes on as before.
    """
    findings = []
    for axis in view.encoded:
        found = measured_share(view, axis)
        if found is not None:
            share, fall, least = found
            findings.append(_finding(LETTERS[axis], share, fall, least))
    return tuple(findings)


def measured_share(view: ScanView, axis: int) -> tuple[float, float, float] | None:
    """Share of k-space measured along an axis, fall at its end in dB, least fall believed."""
    return _of_profile(view, axis) if view.has_phase else _of_detail(view, axis)


def _of_profile(view: ScanView, axis: int) -> tuple[float, float, float] | None:
    up, down = view.profile_edges(axis)
    length = view.volume.shape[axis]
    sides = (length - length // 2 - 1, length // 2)
    reach = [
        (edge.place if edge.fall_db >= PROFILE_DB else side)
        for edge, side in zip((up, down), sides, strict=True)
    ]
    if abs(reach[0] - reach[1]) <= max(2.0, SYMMETRY * length):
        return None
    fall = up.fall_db if reach[0] < reach[1] else down.fall_db
    whole = 2 * max(reach) + (1 if max(reach) < sides[1] else 0)
    return (reach[0] + reach[1] + 1) / whole, fall, PROFILE_DB


def _of_detail(view: ScanView, axis: int) -> tuple[float, float, float] | None:
    edge = view.detail_edge(axis, *_ENDS)
    if edge is None or not STEP_DB <= edge.fall_db < DETAIL_DB or edge.slope_db < STEEPEST_DB:
        return None
    if measured_matrix(view, axis) is not None:
        return None
    return (1 + edge.place) / 2, edge.fall_db, STEP_DB


def _finding(letter: str, share: float, fall: float, least: float) -> Finding:
    return Finding(
        code="partial-fourier",
        what=f"About {share:.2f} of k-space along {letter} was measured; one side ends early "
        f"(power falls by {fall:.0f} dB there).",
        where=f"axis {letter}",
        statistic=fall,
        threshold=least,
        bias="The empty part counts as measured in the reference: errors there go unseen and the "
        "stated acceleration is larger than the true one.",
        advice="Restrict patterns to the measured side, or use a scan with full sampling.",
        remedy="acquired_region",
        settings=((letter, round(share, 3)),),
    )
