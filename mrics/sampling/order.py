"""In which shot and echo each position is played.

Positions are sorted outward (by radius) or along the phase axis, cut into as many bands as a train
has echoes, and every shot plays one position of each band. Bands are moved round the train until
the one that holds the centre of k-space falls on the wanted echo; where the train's last echo then
meets its first in k-space, the decay steps. Bands run forward or backward, whichever keeps that
step farther from the centre: radial orders outward for early, inward for late echo times.
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import PatternError
from mrics.sampling.ordered import Index, Ordered, jumps, squared_radius
from mrics.sampling.pattern import Pattern
from mrics.sampling.whole_shots import RULES, fill_shots

SCHEMES = ("linear", "centre-out", "radial-sector")


def order_pattern(
    pattern: Pattern,
    *,
    train_length: int,
    scheme: str = "linear",
    spacing_ms: float | None = None,
    echo_time_ms: float | None = None,
    first_ms: float | None = None,
    centre_ms: float | None = None,
    whole_shots: str | None = None,
) -> Ordered:
    """Assign every acquired position of a pattern to a shot and an echo.

    Parameters
    ----------
    pattern : Pattern
        1-D or 2-D, with or without frames.
    train_length : int
        Positions acquired in one shot, at least 1.
    scheme : str
        "linear": bands along the phase axis. "centre-out": bands by normalised radius, shots in
        rows. "radial-sector" (2-D patterns): bands by radius, each shot keeping to one sector of
        angles, so that successive echoes lie close together.
    spacing_ms : float, optional
        Time between successive echoes; without it no times are reported.
    echo_time_ms : float, optional
        Wanted effective echo time; the nearest echo gets the centre of k-space. Without it the
        centre falls where the scheme puts it (middle of the train, or first echo).
    first_ms : float, optional
        Time of the first echo (default: ``spacing_ms``, as after a spin-echo excitation).
    centre_ms : float, optional
        In place of ``first_ms``: time of the echo that holds the centre of k-space, as the
        inversion time of prepared sequences fixes it.
    whole_shots : str, optional
        How the count is made whole shots: "add" the next most probable positions, "drop" the
        least probable ones, or leave echoes "idle" and the pattern as drawn. Default: "add" for
        random patterns ("drop" for Poisson-disc, whose distances it keeps), "idle" for regular
        ones, whose lattice it keeps.

    Raises
    ------
    PatternError
        For a train longer than the pattern, an echo time outside the train, a scheme that does not
        fit the pattern, or positions that cannot be dropped.
    """
    _check(pattern, train_length, scheme, spacing_ms, whole_shots)
    rule = whole_shots or _usual_rule(pattern)
    rounded = fill_shots(pattern, train_length, rule)
    masks = rounded.mask if pattern.frames else rounded.mask[None]
    wanted = _wanted_echo(train_length, spacing_ms, echo_time_ms, first_ms)
    orders, plays, steps, shots = [], [], [], 0
    for mask in masks:
        positions = np.argwhere(mask)
        order, centre, step = _order(positions, mask.shape, train_length, scheme, wanted)
        steps.append(step)
        # Later frames put the centre where the first one has it.
        wanted = centre if wanted is None else wanted
        plays.append((positions, order))
        shots = int(order[:, 0].max()) + 1
        orders.append(order)
    assert wanted is not None
    echo_jumps, shot_jumps = jumps(plays)
    settings = pattern.settings | {
        "order": scheme,
        "train_length": train_length,
        "whole_shots": rule,
        "count_before_shots": rounded.before,
        "count": rounded.after,
    }
    return Ordered(
        pattern=replace(
            pattern, mask=rounded.mask, order=np.concatenate(orders), settings=settings
        ),
        scheme=scheme,
        train_length=train_length,
        shots=shots * len(masks),
        centre_echo=wanted,
        times_ms=_times(train_length, spacing_ms, first_ms, centre_ms, wanted),
        wanted_ms=echo_time_ms,
        rounded=rounded,
        step_radius=steps[0],
        echo_jumps=echo_jumps,
        shot_jumps=shot_jumps,
    )


def _usual_rule(pattern: Pattern) -> str:
    """Add positions to random patterns, none to regular ones, and keep the distances of discs."""
    if pattern.probability is None:
        return "idle"
    # A position added to a Poisson-disc pattern may lie too close to another; none dropped does.
    return "drop" if pattern.settings.get("draw") == "poisson-disc" else "add"


def _check(
    pattern: Pattern,
    train_length: Any,
    scheme: str,
    spacing_ms: float | None,
    whole_shots: str | None,
) -> None:
    whole = isinstance(train_length, int | np.integer) and not isinstance(train_length, bool)
    if not whole or train_length < 1:
        raise PatternError(
            f"The echo train length {train_length!r} is not a whole number of at least 1.",
            "train_length",
            "Give the number of positions one shot acquires.",
        )
    for name, value, known in (
        ("scheme", scheme, SCHEMES),
        ("whole_shots", whole_shots or RULES[0], RULES),
    ):
        if value not in known:
            raise PatternError(f"{name} = {value!r} is not known.", name, f"Use one of {known}.")
    if scheme == "radial-sector" and len(pattern.grid) == 1:
        raise PatternError(
            "The order 'radial-sector' needs a 2-D pattern; this one has one phase axis.",
            "scheme",
            "Use 'linear' or 'centre-out'.",
        )
    if spacing_ms is not None and not (math.isfinite(spacing_ms) and spacing_ms > 0):
        raise PatternError(
            f"The echo spacing {spacing_ms!r} ms is not a number above 0.",
            "spacing_ms",
            "Give the time between successive echoes.",
        )


def _wanted_echo(
    length: int, spacing: float | None, echo_time: float | None, first: float | None
) -> int | None:
    if echo_time is None:
        return None
    if spacing is None:
        raise PatternError(
            "An echo time is asked for, but no echo spacing is given.",
            "spacing_ms",
            "Give the time between successive echoes.",
        )
    start = spacing if first is None else first
    echo = (echo_time - start) / spacing
    if not -0.5 <= echo < length - 0.5:
        raise PatternError(
            f"The echo time {echo_time:g} ms lies outside the train, whose echoes come from "
            f"{start:g} to {start + (length - 1) * spacing:g} ms.",
            "echo_time_ms",
            "Give an echo time in that range, or another train length or echo spacing.",
        )
    return min(length - 1, math.floor(echo + 0.5))


def _times(
    length: int,
    spacing: float | None,
    first: float | None,
    centre_ms: float | None,
    centre: int,
) -> NDArray[np.float64] | None:
    if spacing is None:
        return None
    start = spacing if first is None else first
    if centre_ms is not None:
        start = centre_ms - centre * spacing
    return np.asarray(start + spacing * np.arange(length), dtype=np.float64)


def _order(
    positions: Index, grid: tuple[int, ...], length: int, scheme: str, wanted: int | None
) -> tuple[Index, int, float | None]:
    """(shot, echo) of every position, the echo of the centre, and where the decay steps."""
    k = np.asarray(positions - [n // 2 for n in grid], dtype=np.int64)
    square = squared_radius(positions, grid)
    # Positions come sorted by phase, then partition.
    rank = np.arange(len(k)) if scheme == "linear" else np.argsort(square, kind="stable")
    shots = -(-len(k) // length)
    idle = shots * length - len(k)
    place = int(np.flatnonzero(rank == int(square.argmin()))[0])
    sizes, centre_band = _band_sizes(length, shots, idle, place, scheme)
    band = np.empty(len(k), dtype=np.int64)
    band[rank] = np.repeat(np.arange(length), sizes)
    shot = _shots(k, grid, band, scheme)
    echo_of_centre = centre_band if wanted is None else wanted
    along = square if scheme != "linear" else (k[:, 0] * (math.prod(grid) // grid[0])) ** 2
    distance = np.sqrt(along[rank].astype(np.float64)) * 2 / math.prod(grid)
    choices = [
        (_seam(sizes, distance, centre_band, echo_of_centre, forward), forward)
        for forward in (True, False)
    ]
    step, forward = max(choices, key=lambda c: math.inf if c[0] is None else c[0])
    echo = (band - centre_band if forward else centre_band - band) + echo_of_centre
    return np.stack([shot, echo % length], axis=1), echo_of_centre, step


def _seam(
    sizes: Index, distance: NDArray[np.float64], centre_band: int, echo: int, forward: bool
) -> float | None:
    """Distance at which the first and last echo meet when bands run forward or backward."""
    length = len(sizes)
    # The first band after the seam.
    band = (centre_band - echo if forward else centre_band + echo + 1) % length
    at = int(sizes[:band].sum())
    return float(distance[at - 1 : at + 1].min()) if 0 < at < len(distance) else None


def _band_sizes(length: int, shots: int, idle: int, place: int, scheme: str) -> tuple[Index, int]:
    """Positions per band, and the band that holds sorted position ``place``.

    Idle echoes fall in the outermost bands, one each, so that one shot alone is short.
    """
    if scheme == "linear":
        middle = min(length - 1, place * length // max(1, shots * length - idle))
        outward = np.argsort(np.abs(np.arange(length) - middle), kind="stable")
    else:
        outward = np.arange(length)
    sizes = np.full(length, shots, dtype=np.int64)
    sizes[outward[length - idle :]] -= 1
    return sizes, int(np.searchsorted(np.cumsum(sizes), place, side="right"))


def _shots(k: Index, grid: tuple[int, ...], band: Index, scheme: str) -> Index:
    """Shot of every position: its rank within its band, along the scheme's second direction."""
    keys: tuple[NDArray[Any], ...]
    if scheme == "radial-sector":
        half = np.array(grid) / 2
        # Rounded: positions in one direction must tie on every machine.
        angle = np.round(np.arctan2(k[:, 1] / half[1], k[:, 0] / half[0]), 9)
        keys = (k[:, 1], k[:, 0], angle)
    elif scheme == "linear" and k.shape[1] == 2:
        keys = (k[:, 0], k[:, 1])
    else:
        keys = tuple(k.T[::-1])
    rank = np.lexsort((*keys, band))
    starts = np.searchsorted(band[rank], np.arange(int(band.max()) + 1))
    shot = np.empty(len(k), dtype=np.int64)
    shot[rank] = np.arange(len(k)) - starts[band[rank]]
    return shot
