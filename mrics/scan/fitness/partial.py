"""Partial Fourier: one side of k-space was not measured and left empty."""

from __future__ import annotations

from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.noise_level import signal
from mrics.scan.fitness.view import PROFILE_DB, ScanView
from mrics.scan.fitness.zero_fill import SYMMETRY, measured_matrix
from mrics.scan.volume import LETTERS

# Step in the detail of a magnitude image, dB: half of the amplitude (6 dB) is gone beyond it.
STEP_DB = 2.8
MOST_STEP_DB = 8.5
# A step along another axis too, dB: then the object or a filter has it.
ELSEWHERE_DB = 2.0
# Samples of a spectrum, from zero to the largest frequency, that show a step rather than a slope.
LEAST_SAMPLES = 24
# Steepest decline on either side of the step, dB from zero to the largest frequency, and largest
# exponent of a power law before it: what was smoothed falls more, and ends in the noise floor.
STEEPEST_DB = -46.0
LARGEST_EXPONENT = 3.6
# Without noise there is nothing that was measured to tell a step from a shape.
MOST_SNR = 300.0
_BIAS = (
    "The empty part counts as measured in the reference: errors there go unseen and the stated "
    "acceleration is larger than the true one."
)
_ENDS = (0.2, 0.82)


def partial_fourier(view: ScanView) -> tuple[Finding, ...]:
    """K-space along an axis ends early on one side only.

    With phase, the profile of k-space is empty beyond the last line of that side. In a magnitude
    image both sides look alike, but the detail beyond the missing part has half its amplitude:
    the spectrum in tissue falls by 3 to 8 dB at once and then goes on as before. What was filled
    in by a phase-corrected method has no such step and cannot be told.
    """
    findings = []
    for axis in view.encoded:
        found = measured_share(view, axis)
        if found is not None:
            if view.has_phase:
                up, down = _reach(view, axis)
                side = "high" if up < down else "low"
                findings.append(_one_side_empty(LETTERS[axis], *found, side))
            else:
                findings.append(_detail_halved(LETTERS[axis], *found))
    return tuple(findings)


def measured_share(view: ScanView, axis: int) -> tuple[float, float, float] | None:
    """Share of k-space measured along an axis, fall at its end in dB, least fall believed."""
    return _of_profile(view, axis) if view.has_phase else _of_detail(view, axis)


def _of_profile(view: ScanView, axis: int) -> tuple[float, float, float] | None:
    up, down = _reach(view, axis)
    length = view.volume.shape[axis]
    if abs(up - down) <= max(2.0, SYMMETRY * length):
        return None
    fall = view.profile_edges(axis)[0 if up < down else 1].fall_db
    whole = 2 * max(up, down) + (1 if max(up, down) < length // 2 else 0)
    return (up + down + 1) / whole, fall, PROFILE_DB


def _reach(view: ScanView, axis: int) -> tuple[float, float]:
    """Samples of the positive and the negative side of k-space that hold data."""
    up, down = view.profile_edges(axis)
    length = view.volume.shape[axis]
    return (
        up.place if up.fall_db >= PROFILE_DB else length - length // 2 - 1,
        down.place if down.fall_db >= PROFILE_DB else length // 2,
    )


def _of_detail(view: ScanView, axis: int) -> tuple[float, float, float] | None:
    edge, spectrum = view.detail_edge(axis, *_ENDS), view.detail_spectrum(axis)
    if edge is None or spectrum is None or len(spectrum.frequency) < LEAST_SAMPLES:
        return None
    if not STEP_DB <= edge.fall_db < MOST_STEP_DB:
        return None
    if min(edge.before_db, edge.after_db) < STEEPEST_DB or edge.exponent > LARGEST_EXPONENT:
        return None
    if signal(view) > MOST_SNR * view.noise.sigma or measured_matrix(view, axis) is not None:
        return None
    for other in (a for a in view.encoded if a != axis):
        step = view.detail_edge(other, *_ENDS)
        if step is not None and step.fall_db > ELSEWHERE_DB:
            return None
    return (1 + edge.place) / 2, edge.fall_db, STEP_DB


def _one_side_empty(letter: str, share: float, fall: float, least: float, side: str) -> Finding:
    turned = "" if side == "low" else " of the remedied scan, whose empty side is the lower one"
    return Finding(
        code="partial-fourier",
        what=f"About {share:.2f} of k-space along {letter} was measured; its {side} side ends "
        f"early (power falls by {fall:.0f} dB there).",
        where=f"axis {letter}",
        statistic=fall,
        threshold=least,
        bias=_BIAS,
        advice=f"Restrict patterns to the measured part: partial_fourier = {share:.3f} in the "
        f"sampling tables{turned}; or use a scan with full sampling.",
        remedy="acquired_region",
        settings=((letter, round(share, 3)), ("empty", side)),
    )


def _detail_halved(letter: str, share: float, fall: float, least: float) -> Finding:
    return Finding(
        code="partial-fourier",
        what=f"Detail along {letter} has half its amplitude (power falls by {fall:.0f} dB) beyond "
        f"what {share:.2f} of k-space would leave: one side was not measured.",
        where=f"axis {letter}",
        statistic=fall,
        threshold=least,
        bias=_BIAS,
        advice="Use a scan with full sampling; of a magnitude image the empty side cannot be told.",
    )
