"""Scan time of one arm: a pattern played by the protocol's sequence."""

from __future__ import annotations

import math
from dataclasses import replace

from mrics.errors import ProtocolError
from mrics.protocol.arms import Arm
from mrics.protocol.document import Protocol
from mrics.protocol.messages import within
from mrics.protocol.timing import Timing, sequence_time
from mrics.sampling import Pattern, draw_entry


def scan_time(
    protocol: Protocol, pattern: Pattern, *, arm: Arm | None = None, slices: int | None = None
) -> Timing:
    """Scan time of a pattern in the protocol's sequence.

    Time counts the acquired steps of ``[grid]``, which oversampling and interpolation make
    different from the image matrix the pattern is drawn on; counts are then scaled.

    Parameters
    ----------
    protocol : Protocol
        The protocol.
    pattern : Pattern
        One draw of the arm.
    arm : Arm, optional
        The arm: its averages, and what a separate calibration scan takes off a regular pattern.
    slices : int, optional
        Slices of a 2-D scan where ``[grid]`` does not give them.

    Raises
    ------
    ProtocolError
        For timings no scanner can play.
    """
    grid, sequence = protocol.grid, protocol.sequence
    given = (grid.phase_steps, grid.partition_steps)[: len(pattern.grid)]
    steps = tuple(n if step is None else step for n, step in zip(pattern.grid, given, strict=True))
    findings = _assumed(given, steps, pattern.grid)
    count, separate = pattern.acquired, 0
    if sequence.calibration_scan == "separate":
        separate = math.prod(pattern.calibration)
        if pattern.probability is None and arm is not None and separate:
            # The main scan of a regular pattern plays the lattice alone.
            bare = {**arm.sampling, "calibration": 0}
            count = draw_entry(bare, pattern.grid, arm.acceleration).acquired
    full, matrix = math.prod(steps), math.prod(pattern.grid)
    if not sequence.three_d and grid.slices is None and slices is None:
        findings.append("The number of slices is not given: time is for one package.")
    try:
        timing = sequence_time(
            sequence,
            min(full, max(1, round(count * full / matrix))),
            full,
            slices=grid.slices or slices or 1,
            partitions=steps[1] if len(steps) > 1 else None,
            calibration=round(separate * full / matrix),
            averages=None if arm is None else arm.averages,
        )
    except ProtocolError as error:
        where = within(protocol.path, protocol.text, ("sequence",), error.where)
        raise ProtocolError(error.what, where, error.fix) from error
    return replace(timing, findings=(*findings, *timing.findings))


def _assumed(
    given: tuple[int | None, ...], steps: tuple[int, ...], matrix: tuple[int, ...]
) -> list[str]:
    findings = []
    names = ("phase_steps", "partition_steps")
    for name, asked, step, n in zip(names, given, steps, matrix, strict=False):
        if asked is None:
            findings.append(f"{name} is taken as the image matrix, {n} (assumed).")
        elif step != n:
            findings.append(
                f"{name} = {step} differs from the image matrix {n}: acquired counts are scaled."
            )
    return findings
