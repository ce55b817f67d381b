"""Zero-filled interpolation: the outer k-space of a finer grid is empty."""

from __future__ import annotations

from mrics.scan.fitness.edges import half_power_place
from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.view import DETAIL_DB, PROFILE_DB, ScanView
from mrics.scan.volume import LETTERS

# Both sides of a profile must end within this share of the axis of each other.
SYMMETRY = 0.03
# The fall at the end of the data over what the slope before it would make: a smoothed image, whose
# steep decline ends in the noise floor, stays below 1.5.
LEAST_SHARPNESS = 3.0


def zero_filled(view: ScanView) -> tuple[Finding, ...]:
    """K-space along an axis ends before the grid does.

    With phase the profile of k-space itself is empty beyond the acquired matrix, on both sides.
    Taking the magnitude fills it again, but hardly where signal is strong: in tissue the spectrum
    of detail still falls by 20 dB at the place where the data ended.
    """
    findings = []
    for axis in view.encoded:
        found = measured_matrix(view, axis)
        if found is not None:
            true, fall, least = found
            findings.append(_finding(LETTERS[axis], view.volume.shape[axis], true, fall, least))
    return tuple(findings)


def measured_matrix(view: ScanView, axis: int) -> tuple[int, float, float] | None:
    """Samples measured along a zero-filled axis, fall at their end in dB, least fall believed."""
    return _of_profile(view, axis) or (None if view.has_phase else _of_detail(view, axis))


def _of_profile(view: ScanView, axis: int) -> tuple[int, float, float] | None:
    up, down = view.profile_edges(axis)
    fall = min(up.fall_db, down.fall_db)
    length = view.volume.shape[axis]
    if fall < PROFILE_DB or abs(up.place - down.place) > max(2.0, SYMMETRY * length):
        return None
    return int(up.place + down.place) + 1, fall, PROFILE_DB


def _of_detail(view: ScanView, axis: int) -> tuple[int, float, float] | None:
    spectrum = view.detail_spectrum(axis)
    edge = view.detail_edge(axis)
    if spectrum is None or edge is None:
        return None
    if edge.fall_db < DETAIL_DB or edge.sharpness < LEAST_SHARPNESS:
        return None
    share = half_power_place(spectrum, edge)
    return round(share * view.volume.shape[axis]), edge.fall_db, DETAIL_DB


def _finding(letter: str, length: int, true: int, fall: float, least: float) -> Finding:
    return Finding(
        code="zero-filled",
        what=f"K-space along {letter} ends at {true} of {length} samples, where power falls by "
        f"{fall:.0f} dB: the image was interpolated by zero-filling.",
        where=f"axis {letter}",
        statistic=fall,
        threshold=least,
        bias="A pattern on the padded grid spends samples on k-space that is known to be empty: "
        "what is truly measured is accelerated less than stated, and looks better for it.",
        advice=f"Crop k-space along {letter} to {true} samples before the study.",
        remedy="crop_kspace",
        settings=((letter, true),),
    )
