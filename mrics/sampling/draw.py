"""Drawing one pattern from a sampling entry."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from mrics.errors import PatternError
from mrics.numerics import stream
from mrics.sampling.best import best_of
from mrics.sampling.disc import TooDenseError
from mrics.sampling.grid import (
    Field,
    Mask,
    calibration_block,
    check_calibration,
    check_grid,
    check_partial_fourier,
    elliptical_shutter,
    partial_fourier_region,
)
from mrics.sampling.laws import LAWS, law_density
from mrics.sampling.pattern import Pattern
from mrics.sampling.probability import ONE, Quanta, inclusion
from mrics.sampling.realise import Drawn, realise, realise_frames
from mrics.sampling.regular_draw import Played, play_regular
from mrics.sampling.source import law_source
from mrics.sampling.vocabulary import Entry, entry_keys, parse_entry
from mrics.scan.volume import Axes


def draw_pattern(
    shape: tuple[int, ...] | int,
    *,
    law: str = "power",
    draw: str = "exact-count",
    acceleration: float = 4,
    calibration: int | tuple[int, ...] = 24,
    seed: int = 0,
    frames: int = 0,
    **law_settings: Any,
) -> Pattern:
    """Draw a sampling pattern.

    Parameters
    ----------
    shape : tuple of int
        (phase steps,) for a 1-D pattern, (phase steps, partition steps) for a 2-D one.
    law : str
        "uniform", "gaussian", "power", "inverse-square", "energy" (with ``training``) or "table".
    draw : str
        "exact-count", "bernoulli", "poisson-disc" (2-D), "low-discrepancy" or "jittered".
    acceleration : float
        Positions of the full grid / acquired positions, calibration included; at least 1. For a
        regular pattern the lattice step: calibration lines come on top.
    calibration : int or tuple of int
        Fully sampled central positions, per axis; 24 is 24 lines in 1-D, 24 x 24 in 2-D.
    seed : int
        The same seed gives the same pattern on any machine.
    frames : int
        0 for one pattern, else a pattern per frame.
    **law_settings
        Any further key of a sampling entry: the law's parameters (``exponent``, ``width``, ...),
        ``elliptical``, ``partial_fourier``, ``best_of``, or ``pattern`` for a regular family, which
        then stands in place of law and draw.

    Returns
    -------
    Pattern
        With ``mask`` (zero frequency at N//2) and ``acceleration`` (achieved).

    Raises
    ------
    PatternError
        For values out of range, unknown keys, and accelerations the grid cannot hold; the largest
        or smallest feasible one is named.
    """
    entry: dict[str, Any] = {"calibration": calibration, **law_settings}
    if entry.get("pattern", "random") == "random":
        entry |= {"law": law, "draw": draw}
    return draw_entry(entry, shape, acceleration, seed, frames=frames)


def draw_entry(
    entry: dict[str, Any],
    shape: tuple[int, ...] | int,
    acceleration: float | None = None,
    seed: int = 0,
    *,
    frames: int = 0,
    identity: tuple[object, ...] = (),
    axes: Axes | None = None,
    quanta: Quanta | None = None,
) -> Pattern:
    """Draw one pattern of a protocol's sampling entry.

    Parameters
    ----------
    entry : dict
        Keys of a ``[[sampling]]`` or ``[today]`` table.
    shape : tuple of int
        The phase-encode grid.
    acceleration : float, optional
        Which of the entry's accelerations; may be left out when the entry has one.
    seed : int
        Study seed.
    frames : int
        0 for one pattern for all frames, else a pattern per frame; what they share is the entry's
        ``frame_draws``.
    identity : tuple
        What the draw is for (scan, arm, draw number); takes part in the random stream.
    axes : Axes, optional
        Which file axes the grid lies on; used for a law's training scans alone.
    quanta : ndarray of int64, optional
        Inclusion probabilities in units of 2^-30 in place of those of the law, as a table keeps
        them (``law_quanta``).

    Returns
    -------
    Pattern
        ``settings`` holds the entry, what was asked and what came out.

    Raises
    ------
    PatternError
        As :func:`draw_pattern`.
    """
    parsed = parse_entry(entry)
    grid = check_grid(shape)
    place = _Place.of(parsed, grid)
    settings: dict[str, Any] = {
        **_described(parsed),
        "acceleration": _acceleration(parsed, acceleration),
        "calibration": list(place.calibration),
        "partial_fourier": list(place.fraction),
        "seed": _seed(seed),
        "identity": [str(part) for part in identity],
        "grid": list(grid),
        "frames": _frames(frames),
    }
    order = probability = None
    calibration = place.calibration
    if parsed.pattern == "random":
        random = _Random.of(parsed, place, settings["acceleration"], axes, quanta)
        drawn, facts = random.draw(seed, identity, frames)
        mask = drawn.mask
        probability = random.quanta / ONE
        if frames:
            probability = np.broadcast_to(probability, mask.shape)
        settings |= facts
    else:
        played = _regular(parsed, place, settings["acceleration"], frames)
        mask, order = played.mask, played.order
        calibration = played.calibration or calibration
        settings |= played.facts
    settings["count"] = int(mask.sum())
    return Pattern(
        mask=mask,
        frames=frames,
        probability=probability,
        calibration=calibration,
        shutter=None if place.shutter.all() else place.shutter,
        order=order,
        settings=settings,
    )


def redraw(settings: dict[str, Any], quanta: Quanta | None = None) -> Pattern:
    """Draw again from the settings a pattern carries, as a JSON table stores them.

    Parameters
    ----------
    settings : dict
        ``Pattern.settings``.
    quanta : ndarray of int64, optional
        Stored probabilities of laws that come from files.
    """
    known = entry_keys(settings["pattern"], settings.get("law", ""))
    entry = {k: settings[k] for k in known if k in settings and k != "acceleration"}
    return draw_entry(
        entry,
        tuple(settings["grid"]),
        settings["acceleration"],
        settings["seed"],
        frames=settings["frames"],
        identity=tuple(settings["identity"]),
        quanta=quanta,
    )


@dataclass(frozen=True)
class _Place:
    """Where an entry may and must acquire on a grid."""

    grid: tuple[int, ...]
    calibration: tuple[int, ...]
    fraction: tuple[float, ...]
    certain: Mask
    shutter: Mask

    @classmethod
    def of(cls, parsed: Entry, grid: tuple[int, ...]) -> _Place:
        calibration = check_calibration(parsed.calibration, grid)
        fraction = check_partial_fourier(parsed.partial_fourier, grid)
        certain = calibration_block(grid, calibration)
        shutter = partial_fourier_region(grid, fraction)
        if parsed.elliptical:
            shutter &= elliptical_shutter(grid)
        return cls(grid, calibration, fraction, certain, shutter | certain)


@dataclass(frozen=True)
class _Random:
    """A law with its probabilities on a grid, ready to be drawn."""

    parsed: Entry
    place: _Place
    density: Field
    acceleration: float
    quanta: Quanta

    @classmethod
    def of(
        cls,
        parsed: Entry,
        place: _Place,
        acceleration: float,
        axes: Axes | None,
        quanta: Quanta | None,
    ) -> _Random:
        if quanta is not None:
            return cls(parsed, place, quanta / ONE, acceleration, quanta)
        density = law_density(
            place.grid,
            parsed.law,
            parsed.law_settings,
            elliptical=parsed.elliptical,
            per_axis=parsed.per_axis,
            source=law_source(parsed.law, parsed.source, place.grid, axes),
        )
        count = density.size / acceleration
        if parsed.draw != "bernoulli":
            count = round(count)
        quanta = inclusion(density, count, certain=place.certain, allowed=place.shutter)
        return cls(parsed, place, density, acceleration, quanta)

    def draw(
        self, seed: int, identity: tuple[object, ...], frames: int
    ) -> tuple[Drawn, dict[str, Any]]:
        """The draw (the best of several where asked) and what is stored of it."""

        def candidate(index: int) -> Drawn:
            more = ("candidate", index) if index else ()
            generator = stream(_seed(seed), "pattern", *identity, *more)
            if not frames:
                return realise(self.parsed.draw, self.quanta, self.place.certain, generator)
            return realise_frames(
                self.parsed.draw,
                self.parsed.frame_draws,
                frames,
                self.quanta,
                self.place.certain,
                generator,
            )

        facts: dict[str, Any] = {"requested_count": round(self.density.size / self.acceleration)}
        try:
            if self.parsed.best_of == 1:
                drawn = candidate(0)
            else:
                drawn, judged = best_of(
                    candidate, self.quanta / ONE, self.parsed.best_of, self.parsed.best_by
                )
                facts |= judged
        except TooDenseError as error:
            raise PatternError(
                error.what,
                error.where,
                f"The smallest feasible acceleration is about {self._least_acceleration(seed):.3g};"
                " or use the draw 'exact-count'.",
            ) from error
        return drawn, facts | drawn.facts

    def _least_acceleration(self, seed: int) -> float:
        """Smallest R, to half a per cent, at which some distance can be kept."""
        low, high = self.acceleration, self.acceleration
        while not self._feasible(high, seed):
            low, high = high, 1.25 * high
        while high > 1.005 * low:
            middle = (low * high) ** 0.5
            low, high = (low, middle) if self._feasible(middle, seed) else (middle, high)
        return high

    def _feasible(self, acceleration: float, seed: int) -> bool:
        count = round(self.density.size / acceleration)
        quanta = inclusion(
            self.density, count, certain=self.place.certain, allowed=self.place.shutter
        )
        try:
            realise(self.parsed.draw, quanta, self.place.certain, stream(seed, "feasible"))
        except TooDenseError:
            return False
        return True


def _described(parsed: Entry) -> dict[str, Any]:
    """The entry as it is stored: names, parameters and options, defaults filled in."""
    kept: dict[str, Any] = {"pattern": parsed.pattern, "elliptical": parsed.elliptical}
    if isinstance(parsed.source, str | Path | list | tuple):
        named = [parsed.source] if isinstance(parsed.source, str | Path) else parsed.source
        kept[LAWS[parsed.law].source] = [str(n) for n in named if isinstance(n, str | Path)]
    if parsed.law:
        kept |= {"law": parsed.law, "draw": parsed.draw, **parsed.law_settings}
        kept |= {"per_axis": parsed.per_axis, "best_of": parsed.best_of}
        if parsed.best_of > 1:
            kept["best_by"] = parsed.best_by
    return {**kept, "frame_draws": parsed.frame_draws, **parsed.options}


def _acceleration(parsed: Entry, acceleration: float | None) -> float | None:
    if acceleration is not None:
        return parse_entry({"acceleration": acceleration}).accelerations[0]
    if len(parsed.accelerations) == 1:
        return parsed.accelerations[0]
    if parsed.pattern == "full":
        return 1.0
    if parsed.pattern == "file" or "steps" in parsed.options:
        return None
    raise PatternError(
        f"The entry gives {len(parsed.accelerations)} accelerations where one is needed.",
        "acceleration",
        "Say which acceleration to draw.",
    )


def _seed(seed: Any) -> int:
    whole = isinstance(seed, int | np.integer) and not isinstance(seed, bool)
    if not whole or seed < 0:
        raise PatternError(
            f"The seed {seed!r} is not a whole number of at least 0.",
            "seed",
            "Give a non-negative whole number.",
        )
    return int(seed)


def _frames(frames: Any) -> int:
    whole = isinstance(frames, int | np.integer) and not isinstance(frames, bool)
    if not whole or frames < 0:
        raise PatternError(
            f"frames = {frames!r} is not a whole number of at least 0.",
            "frames",
            "Give 0 for one pattern, or the number of frames.",
        )
    return int(frames)


def _regular(parsed: Entry, place: _Place, acceleration: float | None, frames: int) -> Played:
    return play_regular(
        parsed,
        place.grid,
        acceleration,
        frames,
        certain=place.certain,
        shutter=place.shutter,
    )
