"""Scan time of a sequence from plain counts, against the fully sampled scan.

Formulas (all times of one slice package, dummy shots d, averages n, frames f):

    time = TR * (shots * n * f + d) * packages,   shots = ceil(positions / positions per shot)

Two-dimensional families play the slices that fit into one repetition side by side; further slices
are further packages. A separate calibration scan is added once.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from mrics.errors import ProtocolError
from mrics.protocol.sections import Sequence
from mrics.protocol.shot import Shot, plan_shot

CONSOLE_TOLERANCE = 0.02


@dataclass(frozen=True)
class Timing:
    """How long a scan takes and what that rests on.

    Attributes
    ----------
    scan_time_s, full_scan_time_s : float
        Accelerated and fully sampled scan, separate calibration and dummy shots included.
    shots, full_shots : int
        Excitations (trains) per slice package, average and frame, dummy shots not counted.
    packages : int
        Groups of slices played one after another; 1 for 3-D families.
    slices_per_package : int
        Slices played within one repetition.
    positions_per_shot : int
        Positions one excitation acquires.
    acquired, full : int
        Phase-encode positions of the accelerated and of the full scan.
    calibration_time_s : float
        Part of ``scan_time_s`` spent on a separate calibration scan.
    relative_snr : float
        sqrt(readouts / readouts of the full scan), averages included: SNR is proportional to voxel
        volume x sqrt(total readout time), so the arm's 1/sqrt(R) is in it and its g-factor is not.
    readout_time_s : float or None
        Time in which one slice (or the slab) is read out; None where the bandwidth is not given.
    findings : tuple of str
        What was assumed, and what a reader should know.
    """

    scan_time_s: float
    full_scan_time_s: float
    shots: int
    full_shots: int
    packages: int
    slices_per_package: int
    positions_per_shot: int
    acquired: int
    full: int
    calibration_time_s: float
    relative_snr: float
    readout_time_s: float | None
    findings: tuple[str, ...]

    @property
    def saved_s(self) -> float:
        """Time saved against the full scan."""
        return self.full_scan_time_s - self.scan_time_s


def sequence_time(
    sequence: Sequence,
    acquired: int,
    full: int,
    *,
    slices: int = 1,
    partitions: int | None = None,
    calibration: int = 0,
    averages: int | None = None,
) -> Timing:
    """Scan time for a number of acquired positions.

    Parameters
    ----------
    sequence : Sequence
        The ``[sequence]`` section.
    acquired, full : int
        Phase-encode positions acquired, and of the full grid of acquired steps (phase steps, times
        partition steps in 3-D; oversampling included, interpolation excluded).
    slices : int
        Slices of a 2-D family.
    partitions : int, optional
        Partition steps, of which a prepared 3-D scan plays one line per shot unless
        ``echo_train_length`` says otherwise.
    calibration : int
        Positions of the calibration region, for a separate calibration scan.
    averages : int, optional
        In place of the sequence's, for the accelerated scan.

    Raises
    ------
    ProtocolError
        For counts that do not fit each other and for timings no scanner can play; the message
        says which number to change.
    """
    _check_counts(acquired, full, slices, calibration)
    shot = plan_shot(sequence, acquired=acquired, partitions=partitions)
    full_shot = plan_shot(sequence, acquired=full, partitions=partitions)
    packages, per_package, findings = _packages(sequence, shot, slices)
    # A full scan of longer trains may need more packages than the accelerated one.
    full_packages = _packages(sequence, full_shot, slices)[0]
    used = sequence.averages if averages is None else averages
    shots = math.ceil(acquired / shot.positions)
    full_shots = math.ceil(full / full_shot.positions)
    separate, note = _calibration_time(sequence, shot, calibration, packages)
    time_s = _time(sequence, shots * used, packages) + separate
    readout_s = None
    if sequence.bandwidth_hz_per_pixel is not None:
        readout_s = acquired * used * sequence.frames / sequence.bandwidth_hz_per_pixel
    findings += [*shot.findings, *note]
    idle = shots * shot.positions - acquired
    if idle and shot.fixed:
        findings.append(
            f"The last of {shots} shots holds {shot.positions - idle} of {shot.positions} "
            f"positions: {idle} more would cost no time."
        )
    return Timing(
        scan_time_s=time_s,
        full_scan_time_s=_time(sequence, full_shots * sequence.averages, full_packages),
        shots=shots,
        full_shots=full_shots,
        packages=packages,
        slices_per_package=per_package,
        positions_per_shot=shot.positions,
        acquired=acquired,
        full=full,
        calibration_time_s=separate,
        relative_snr=math.sqrt(acquired * used / (full * sequence.averages)),
        readout_time_s=readout_s,
        findings=tuple(findings),
    )


def console_difference(sequence: Sequence, computed_s: float) -> str | None:
    """The computed time against the console's, a warning above 2 %; None where none is given."""
    shown_s = sequence.console_scan_time_s
    if shown_s is None:
        return None
    off = computed_s / shown_s - 1
    said = f"Computed {minutes(computed_s)} against {minutes(shown_s)} on the console ({off:+.1%})."
    if abs(off) <= CONSOLE_TOLERANCE:
        return said
    return (
        f"Warning: {said} Check repetition time, averages, acquired steps (oversampling, partial "
        "Fourier), packages, dummy shots and today's acceleration."
    )


def snr_index(
    voxel_mm: tuple[float, float, float], readouts: int, readout_samples: int, bandwidth_hz: float
) -> float:
    """Voxel volume x sqrt(total sampling time), for ratios between protocols on one scanner.

    Parameters
    ----------
    voxel_mm : tuple of 3 float
        Acquired voxel size.
    readouts : int
        Readouts that make one image (phase x partition steps x averages).
    readout_samples : int
        Samples of one readout.
    bandwidth_hz : float
        Receiver bandwidth, all pixels together.

    Returns
    -------
    float
        In mm^3 s^(1/2) (Edelstein et al. 1986, Magn Reson Med 3:604-618).
    """
    return math.prod(voxel_mm) * math.sqrt(readouts * readout_samples / bandwidth_hz)


def minutes(seconds: float) -> str:
    """Seconds as the console shows them, min:s, rounded to the second."""
    whole = math.floor(seconds + 0.5)
    return f"{whole // 60}:{whole % 60:02d}"


def _time(sequence: Sequence, shots: int, packages: int) -> float:
    played = shots * sequence.frames + sequence.dummy_shots
    return sequence.repetition_time_ms * played * packages / 1000


def _check_counts(acquired: int, full: int, slices: int, calibration: int) -> None:
    for name, value, low, high in (
        ("full", full, 1, None),
        ("acquired", acquired, 1, full),
        ("slices", slices, 1, None),
        ("calibration", calibration, 0, full),
    ):
        if value < low or (high is not None and value > high):
            span = f"from {low}" + (f" to {high}" if high is not None else "")
            raise ProtocolError(
                f"{name} = {value} positions cannot be timed.",
                name,
                f"Give a whole number {span}.",
            )


def _packages(sequence: Sequence, shot: Shot, slices: int) -> tuple[int, int, list[str]]:
    """Packages, slices in each, and what was assumed."""
    if sequence.three_d:
        return 1, 1, []
    fit = max(1, int(sequence.repetition_time_ms / shot.slice_ms + 1e-9)) if shot.slice_ms else None
    if fit is None:
        findings = ["All slices are taken to fit into one repetition: give slice_time_ms."]
        return 1, slices, findings if slices > 1 else []
    packages = math.ceil(slices / fit)
    findings = []
    if slices > 1 and sequence.slice_time_ms is None:
        findings.append(
            f"One slice is taken to need {shot.slice_ms:g} ms of the repetition ({shot.basis}): "
            "give slice_time_ms if it is longer."
        )
    if packages > 1:
        findings.append(
            f"{slices} slices of {shot.slice_ms:g} ms do not fit into one repetition of "
            f"{sequence.repetition_time_ms:g} ms: {packages} packages of at most {fit}."
        )
    return packages, math.ceil(slices / packages), findings


def _calibration_time(
    sequence: Sequence, shot: Shot, calibration: int, packages: int
) -> tuple[float, list[str]]:
    if sequence.calibration_scan == "inside" or not calibration:
        return 0.0, []
    if sequence.calibration_scan_time_s is not None:
        return sequence.calibration_scan_time_s, []
    played = math.ceil(calibration / shot.positions) + sequence.dummy_shots
    time_s = sequence.repetition_time_ms * played * packages / 1000
    return time_s, [
        f"The separate calibration scan of {calibration} positions is taken to run at the "
        f"sequence's own repetition time, one average: {minutes(time_s)}."
    ]
