"""One excitation: how many positions it acquires, how long it lasts, whether it can be played."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from mrics.errors import ProtocolError
from mrics.protocol.sections import Sequence


@dataclass(frozen=True)
class Shot:
    """One excitation of a sequence.

    Attributes
    ----------
    positions : int
        Positions it acquires.
    fixed : bool
        False where the number follows from the pattern (single-shot echo-planar).
    slice_ms : float or None
        Time it takes of the repetition, from excitation (or inversion) to the end of the last
        readout; None where the protocol does not tell.
    basis : str
        How ``slice_ms`` was reckoned.
    findings : tuple of str
        What was assumed.
    """

    positions: int
    fixed: bool
    slice_ms: float | None
    basis: str
    findings: tuple[str, ...]


def plan_shot(sequence: Sequence, *, acquired: int, partitions: int | None = None) -> Shot:
    """The shot that acquires ``acquired`` positions, checked against the repetition time.

    Raises
    ------
    ProtocolError
        Where the times given cannot be played together.
    """
    family = sequence.family
    if family in ("gradient-echo-2d", "gradient-echo-3d", "spin-echo-2d"):
        shot = _single(sequence)
    elif family.startswith("turbo-spin-echo"):
        shot = _turbo(sequence)
    elif family == "inversion-gradient-echo-3d":
        shot = _prepared(sequence, partitions)
    else:
        shot = _planar(sequence, acquired)
    _check_readout(sequence)
    if sequence.slice_time_ms is not None:
        if shot.slice_ms is not None and sequence.slice_time_ms < shot.slice_ms - 1e-9:
            raise _impossible(
                f"slice_time_ms = {sequence.slice_time_ms:g} is shorter than the "
                f"{shot.slice_ms:g} ms the slice needs ({shot.basis}).",
                "slice_time_ms",
                f"Give slice_time_ms of at least {shot.slice_ms:g}, or shorten what it holds.",
            )
        shot = replace(shot, slice_ms=sequence.slice_time_ms, basis="slice_time_ms")
    if shot.slice_ms is not None and shot.slice_ms > sequence.repetition_time_ms + 1e-9:
        raise _impossible(
            f"One shot lasts {shot.slice_ms:g} ms ({shot.basis}), longer than "
            f"repetition_time_ms = {sequence.repetition_time_ms:g}.",
            "repetition_time_ms",
            f"Give repetition_time_ms of at least {shot.slice_ms:g}"
            + (", or a shorter echo_train_length." if shot.positions > 1 else ", or shorten it."),
        )
    return shot


def _single(sequence: Sequence) -> Shot:
    if sequence.echo_train_length not in (None, 1):
        raise _impossible(
            f"Family {sequence.family!r} acquires one position per repetition, but "
            f"echo_train_length = {sequence.echo_train_length}.",
            "echo_train_length",
            "Remove echo_train_length, or choose a turbo-spin-echo, prepared or planar family.",
        )
    if sequence.echo_time_ms is None:
        return Shot(1, True, None, "", ())
    half = _readout_ms(sequence) / 2
    lasts = sequence.echo_time_ms + half + _inversion(sequence)
    basis = "echo time" + (" and half a readout" if half else "")
    return Shot(1, True, lasts, basis + _with_inversion(sequence), ())


def _turbo(sequence: Sequence) -> Shot:
    length = sequence.echo_train_length
    if length is None:
        raise _impossible(
            f"Family {sequence.family!r} needs the length of its echo train.",
            "echo_train_length",
            "Add echo_train_length, the echoes acquired after one excitation.",
        )
    spacing = sequence.echo_spacing_ms
    if spacing is None:
        return Shot(
            length,
            True,
            None,
            "",
            ("echo_spacing_ms is not given: whether the echo train fits was not checked.",),
        )
    first, last = spacing, length * spacing
    findings = []
    if sequence.echo_time_ms is not None:
        echo = sequence.echo_time_ms / spacing
        if not 0.5 <= echo < length + 0.5:
            raise _impossible(
                f"echo_time_ms = {sequence.echo_time_ms:g} lies outside the echo train, whose "
                f"echoes come from {first:g} to {last:g} ms.",
                "echo_time_ms",
                f"Give an echo time from {first:g} to {last:g} ms, or change echo_train_length or "
                "echo_spacing_ms.",
            )
        centre = min(length, max(1, math.floor(echo + 0.5))) - 1
        if abs((centre + 1) * spacing - sequence.echo_time_ms) > 0.05 * spacing:
            findings.append(
                f"No echo comes at echo_time_ms = {sequence.echo_time_ms:g}; the nearest is echo "
                f"{centre + 1} at {(centre + 1) * spacing:g} ms."
            )
    lasts = (length + 0.5) * spacing + _inversion(sequence)
    basis = f"{length} echoes {spacing:g} ms apart" + _with_inversion(sequence)
    return Shot(length, True, lasts, basis, tuple(findings))


def _prepared(sequence: Sequence, partitions: int | None) -> Shot:
    findings = []
    length = sequence.echo_train_length
    if length is None:
        if partitions is None:
            raise _impossible(
                "The number of positions after one inversion is not known.",
                "echo_train_length",
                "Add echo_train_length, or partition_steps to [grid] (one line per inversion).",
            )
        length = partitions
        findings.append(
            f"echo_train_length is taken as the {partitions} partition steps: one phase-encode "
            "line per inversion."
        )
    centre = 0 if sequence.order == "centre-out" else length // 2
    spacing, delay = sequence.echo_spacing_ms, sequence.inversion_time_ms
    if spacing is None or delay is None:
        missing = "echo_spacing_ms" if spacing is None else "inversion_time_ms"
        findings.append(f"{missing} is not given: whether the train fits was not checked.")
        return Shot(length, True, None, "", tuple(findings))
    before = centre * spacing
    if delay <= before:
        raise _impossible(
            f"inversion_time_ms = {delay:g} is too short: the {centre} positions before the centre "
            f"of k-space already take {before:g} ms.",
            "inversion_time_ms",
            f"Give inversion_time_ms above {before:g}, a shorter echo_train_length or "
            'echo_spacing_ms, or order = "centre-out".',
        )
    lasts = delay + (length - centre) * spacing
    basis = f"inversion time and {length - centre} positions {spacing:g} ms apart after it"
    return Shot(length, True, lasts, basis, tuple(findings))


def _planar(sequence: Sequence, acquired: int) -> Shot:
    length, fixed = sequence.echo_train_length, True
    if length is None:
        length, fixed = acquired, False
    findings = []
    if not fixed or length >= acquired:
        findings.append(
            "Single-shot: leaving out lines shortens the echo train and its distortion, "
            "not the scan, unless the repetition time is shortened too."
        )
    spacing = sequence.echo_spacing_ms
    if spacing is None:
        findings.append("echo_spacing_ms is not given: whether the train fits was not checked.")
        return Shot(length, fixed, sequence.echo_time_ms, "echo time", tuple(findings))
    played = min(length, acquired)
    # Without partial Fourier half the train comes before the centre of k-space.
    before = spacing * (played // 2)
    if sequence.echo_time_ms is None:
        return Shot(
            length,
            fixed,
            played * spacing,
            f"{played} echoes {spacing:g} ms apart",
            tuple(findings),
        )
    if sequence.echo_time_ms < before:
        findings.append(
            f"echo_time_ms = {sequence.echo_time_ms:g} needs the centre of k-space before the "
            f"middle of the train ({before:g} ms): partial Fourier or a shorter train."
        )
        before = sequence.echo_time_ms
    lasts = sequence.echo_time_ms + max(0.0, played * spacing - before)
    basis = f"echo time and the rest of {played} echoes {spacing:g} ms apart"
    return Shot(length, fixed, lasts, basis, tuple(findings))


def _check_readout(sequence: Sequence) -> None:
    spacing, readout = sequence.echo_spacing_ms, _readout_ms(sequence)
    if spacing is not None and readout > spacing + 1e-9:
        raise _impossible(
            f"One readout lasts {readout:g} ms (bandwidth_hz_per_pixel = "
            f"{sequence.bandwidth_hz_per_pixel:g}), longer than echo_spacing_ms = {spacing:g}.",
            "echo_spacing_ms",
            f"Give echo_spacing_ms above {readout:g}, or a bandwidth above "
            f"{1000 / spacing:g} Hz per pixel.",
        )


def _readout_ms(sequence: Sequence) -> float:
    bandwidth = sequence.bandwidth_hz_per_pixel
    return 1000 / bandwidth if bandwidth else 0.0


def _inversion(sequence: Sequence) -> float:
    return sequence.inversion_time_ms or 0.0


def _with_inversion(sequence: Sequence) -> str:
    return " after the inversion time" if sequence.inversion_time_ms else ""


def _impossible(what: str, key: str, fix: str) -> ProtocolError:
    return ProtocolError(what, key, fix)
