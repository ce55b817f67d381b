"""A pattern with its order of acquisition, and what a sequence programmer asks of it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import PatternError
from mrics.sampling.pattern import Pattern
from mrics.sampling.whole_shots import Rounded

Index = NDArray[np.int64]


@dataclass(frozen=True)
class Ordered:
    """A pattern as it is played.

    Attributes
    ----------
    pattern : Pattern
        The pattern as played: whole shots, ``order`` filled in, counts before and after rounding in
        ``settings``.
    scheme : str
        "linear", "centre-out", "radial-sector", or "own" for an order the pattern brought.
    train_length : int
        Echoes of a shot.
    shots : int
        Shots (of every frame together).
    centre_echo : int
        Echo, from 0, that holds the centre of k-space (the acquired position nearest to it).
    times_ms : ndarray of shape (train_length,) or None
        Time of every echo; None where no echo spacing is given.
    wanted_ms : float or None
        Effective echo time asked for.
    rounded : Rounded
        Positions added, dropped and left idle to make whole shots.
    step_radius : float or None
        Where, in units of k_max, the first and the last echo of the train meet in k-space, in the
        first frame; None where they do not.
    echo_jumps, shot_jumps : ndarray of float64
        Distance in k-space steps between successive echoes of a shot, and from the last echo of a
        shot to the first of the next.
    """

    pattern: Pattern
    scheme: str
    train_length: int
    shots: int
    centre_echo: int
    times_ms: NDArray[np.float64] | None
    wanted_ms: float | None
    rounded: Rounded
    step_radius: float | None
    echo_jumps: NDArray[np.float64]
    shot_jumps: NDArray[np.float64]

    @property
    def centre_ms(self) -> float | None:
        """Time at which the centre of k-space is acquired: effective echo or inversion time."""
        return None if self.times_ms is None else float(self.times_ms[self.centre_echo])

    @property
    def findings(self) -> tuple[str, ...]:
        """What rounding changed, and where the wanted echo time is missed."""
        found = list(self.rounded.findings)
        reached = self.centre_ms
        if self.wanted_ms is not None and reached is not None and reached != self.wanted_ms:
            found.append(
                f"Effective echo time {reached:g} ms in place of the {self.wanted_ms:g} ms asked "
                f"for: echo {self.centre_echo + 1} is the nearest."
            )
        if self.step_radius is not None and self.step_radius < 1:
            found.append(
                f"The first and the last echo meet at {self.step_radius:.2f} k_max: the decay "
                "steps there, which rings unless T2 is long against the train."
            )
        return tuple(found)

    def numbers(self) -> dict[str, Any]:
        """The single numbers, as plain values for results files."""
        return {
            "scheme": self.scheme,
            "train_length": self.train_length,
            "shots": self.shots,
            "centre_echo": self.centre_echo + 1,
            "centre_ms": self.centre_ms,
            "wanted_ms": self.wanted_ms,
            "rule": self.rounded.rule,
            "drawn": self.rounded.before,
            "played": self.rounded.after,
            "idle_echoes": self.rounded.idle,
            "step_radius": self.step_radius,
            "echo_jumps": jump_summary(self.echo_jumps),
            "shot_jumps": jump_summary(self.shot_jumps),
        }


def kept_order(pattern: Pattern) -> Ordered:
    """A pattern that brings its own order (spokes, spiral arms, a table), described as it is."""
    if pattern.order is None:
        raise PatternError(
            "The pattern has no order of acquisition.", "order", "Order it by order_pattern."
        )
    masks = pattern.mask if pattern.frames else pattern.mask[None]
    ends = np.cumsum([int(mask.sum()) for mask in masks])
    plays = list(zip(map(np.argwhere, masks), np.split(pattern.order, ends[:-1]), strict=True))
    first_positions, first_order = plays[0]
    centre = int(squared_radius(first_positions, pattern.grid).argmin())
    count = int(pattern.mask.sum())
    nothing = np.zeros((0, pattern.mask.ndim), dtype=np.int64)
    echo_jumps, shot_jumps = jumps(plays)
    length = int(pattern.order[:, 1].max()) + 1
    return Ordered(
        pattern=pattern,
        scheme="own",
        train_length=length,
        shots=sum(len(np.unique(order[:, 0])) for _, order in plays),
        centre_echo=int(first_order[centre, 1]),
        times_ms=None,
        wanted_ms=None,
        rounded=Rounded(pattern.mask, "idle", count, count, nothing, nothing, 0, length),
        step_radius=None,
        echo_jumps=echo_jumps,
        shot_jumps=shot_jumps,
    )


def jump_summary(jumps: NDArray[np.float64]) -> dict[str, float] | None:
    """Mean, median, 95th percentile and maximum; None where nothing follows anything."""
    if not jumps.size:
        return None
    middle, high = np.percentile(jumps, [50, 95])
    return {
        "mean": float(jumps.mean()),
        "median": float(middle),
        "p95": float(high),
        "max": float(jumps.max()),
    }


def jumps(
    plays: list[tuple[Index, Index]],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Echo and shot jumps of the (positions, order) of every frame, one after another."""
    pairs = [_jumps(play) for play in plays]
    return np.concatenate([p[0] for p in pairs]), np.concatenate([p[1] for p in pairs])


def _jumps(play: tuple[Index, Index]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Step lengths between successive echoes, and between successive shots."""
    positions, order = play
    played = np.lexsort((order[:, 1], order[:, 0]))
    steps = np.diff(positions[played], axis=0)
    length = np.sqrt((steps.astype(np.float64) ** 2).sum(axis=1))
    within = np.diff(order[played, 0]) == 0
    return length[within], length[~within]


def squared_radius(positions: Index, grid: tuple[int, ...]) -> Index:
    """Normalised squared radius of positions, in exact integers: ties fall alike everywhere."""
    k = positions - [n // 2 for n in grid]
    scale = [math.prod(grid) // n for n in grid]
    return np.asarray(((k * scale) ** 2).sum(axis=1), dtype=np.int64)
