"""How the protocol's sequence plays a pattern: order, whole shots, decay, limits."""

from __future__ import annotations

import numpy as np

from mrics.errors import MricsError, ProtocolError
from mrics.protocol.document import Protocol
from mrics.protocol.messages import within
from mrics.protocol.sections import Sequence
from mrics.sampling import Pattern
from mrics.sampling.decay import decay_spread
from mrics.sampling.order import order_pattern
from mrics.sampling.ordered import Ordered, kept_order


def play_pattern(protocol: Protocol, pattern: Pattern) -> Ordered:
    """The pattern as the sequence plays it: ordered, and rounded to whole shots.

    Turbo spin echo puts the centre of k-space on the echo nearest to ``echo_time_ms``; prepared
    and echo-planar trains keep the scheme's natural centre and start so that it comes at
    ``inversion_time_ms`` or ``echo_time_ms``. Without ``order``, a turbo-spin-echo train is played
    linear or outward (in sectors in 3-D), whichever keeps the step of its decay farther out.
    Sequences of one echo keep an order that the pattern brings (spokes, spiral arms).

    Raises
    ------
    ProtocolError
        Where the train does not fit the pattern, or the times cannot be played.
    """
    try:
        return _play(protocol.sequence, pattern)
    except MricsError as error:
        where = within(protocol.path, protocol.text, ("sequence",), error.where)
        raise ProtocolError(error.what, where, error.fix) from error


def limit_findings(sequence: Sequence, pattern: Pattern) -> tuple[str, ...]:
    """Which limits of the sequence a pattern breaks, one sentence each."""
    found = []
    count, most = int(pattern.mask.sum()), sequence.max_table_positions
    if most is not None and count > most:
        found.append(f"The table has {count} positions; the sequence reads {most}.")
    gap, widest = line_gap(pattern), sequence.max_line_gap
    if widest is not None and gap > widest:
        found.append(
            f"Neighbouring lines lie up to {gap} steps apart; the sequence plays {widest}."
        )
    length, shortest = sequence.echo_train_length or 1, sequence.min_echo_train_length
    if shortest is not None and length < shortest:
        found.append(f"The echo train has {length} echoes; the sequence plays at least {shortest}.")
    return tuple(found)


def decay_finding(sequence: Sequence, played: Ordered) -> str | None:
    """What the decay along the train does to a point; None without ``tissue_t2_ms`` or times."""
    if sequence.tissue_t2_ms is None or played.times_ms is None or played.train_length == 1:
        return None
    spread = decay_spread(played.pattern, played.times_ms, sequence.tissue_t2_ms)
    axes = "; ".join(
        f"along {name} {before:.2f} to {width:.2f} voxels wide, largest side lobe {low:.0%} to "
        f"{high:.0%}"
        for name, before, width, low, high in zip(
            ("phase", "partition"),
            spread.width_without,
            spread.width,
            spread.side_lobe_without,
            spread.side_lobe,
            strict=False,
        )
    )
    return (
        f"A T2 of {sequence.tissue_t2_ms:g} ms along the train changes a point {axes}; its peak "
        f"is {spread.signal:.0%} of that without decay."
    )


def line_gap(pattern: Pattern) -> int:
    """Widest step between neighbouring acquired lines, along either axis and in any frame.

    A line of a 2-D pattern is acquired where at least one position on it is.
    """
    masks = pattern.mask if pattern.frames else pattern.mask[None]
    widest = 1
    for mask in masks:
        for axis in range(mask.ndim):
            others = tuple(a for a in range(mask.ndim) if a != axis)
            lines = np.flatnonzero(mask.any(axis=others))
            widest = max(widest, int(np.diff(lines).max(initial=1)))
    return widest


def _play(sequence: Sequence, pattern: Pattern) -> Ordered:
    family, length = sequence.family, sequence.echo_train_length
    rule, spacing = sequence.whole_shots, sequence.echo_spacing_ms
    if family.startswith("turbo-spin-echo"):
        return _turbo(sequence, pattern)
    if family == "inversion-gradient-echo-3d":
        length = length or pattern.grid[-1]
        ordered = order_pattern(
            pattern,
            train_length=length,
            scheme=sequence.order or "linear",
            spacing_ms=spacing,
            centre_ms=sequence.inversion_time_ms,
            whole_shots=rule,
        )
        _check_inversion(sequence, ordered)
        return ordered
    if family == "echo-planar-2d":
        return order_pattern(
            pattern,
            train_length=length or _longest(pattern),
            scheme=sequence.order or "linear",
            spacing_ms=spacing,
            centre_ms=sequence.echo_time_ms,
            whole_shots=rule,
        )
    if pattern.order is not None:
        return kept_order(pattern)
    return order_pattern(pattern, train_length=1, scheme=sequence.order or "linear")


def _longest(pattern: Pattern) -> int:
    """Positions of the fullest frame: what a single shot must hold."""
    masks = pattern.mask if pattern.frames else pattern.mask[None]
    return max(int(mask.sum()) for mask in masks)


def _turbo(sequence: Sequence, pattern: Pattern) -> Ordered:
    if sequence.echo_train_length is None:
        raise ProtocolError(
            f"Family {sequence.family!r} needs the length of its echo train.",
            "echo_train_length",
            "Add echo_train_length, the echoes acquired after one excitation.",
        )
    outward = "radial-sector" if len(pattern.grid) > 1 else "centre-out"
    schemes = [sequence.order] if sequence.order else ["linear", outward]
    spacing = sequence.echo_spacing_ms
    played = [
        order_pattern(
            pattern,
            train_length=sequence.echo_train_length,
            scheme=scheme,
            spacing_ms=spacing,
            echo_time_ms=None if spacing is None else sequence.echo_time_ms,
            whole_shots=sequence.whole_shots,
        )
        for scheme in schemes
    ]
    return max(played, key=lambda p: np.inf if p.step_radius is None else p.step_radius)


def _check_inversion(sequence: Sequence, ordered: Ordered) -> None:
    if ordered.times_ms is None or sequence.inversion_time_ms is None:
        return
    start = float(ordered.times_ms[0])
    if start <= 0:
        raise ProtocolError(
            f"inversion_time_ms = {sequence.inversion_time_ms:g} is too short: the "
            f"{ordered.centre_echo} positions before the centre of k-space already take "
            f"{sequence.inversion_time_ms - start:g} ms.",
            "inversion_time_ms",
            f"Give inversion_time_ms above {sequence.inversion_time_ms - start:g}, a shorter "
            'echo_train_length or echo_spacing_ms, or order = "centre-out".',
        )
    end = float(ordered.times_ms[-1]) + float(sequence.echo_spacing_ms or 0)
    if end > sequence.repetition_time_ms:
        raise ProtocolError(
            f"The train ends {end:g} ms after the inversion, later than repetition_time_ms = "
            f"{sequence.repetition_time_ms:g}.",
            "repetition_time_ms",
            f"Give repetition_time_ms of at least {end:g}, or a shorter echo_train_length.",
        )
