"""Drawing one pattern from a sampling entry."""

from __future__ import annotations

from typing import Any

import numpy as np

from mrics.errors import PatternError
from mrics.numerics import stream
from mrics.sampling import draws
from mrics.sampling.grid import (
    Mask,
    calibration_block,
    check_calibration,
    check_grid,
    check_partial_fourier,
    elliptical_shutter,
    partial_fourier_region,
)
from mrics.sampling.laws import law_density
from mrics.sampling.pattern import Pattern
from mrics.sampling.probability import ONE, Quanta, inclusion
from mrics.sampling.regular import lattice, lattice_steps
from mrics.sampling.vocabulary import Entry, parse_entry


def draw_pattern(
    shape: tuple[int, ...] | int,
    *,
    law: str = "power",
    draw: str = "exact-count",
    acceleration: float = 4,
    calibration: int | tuple[int, ...] = 24,
    seed: int = 0,
    **law_settings: Any,
) -> Pattern:
    """Draw a sampling pattern.

    Parameters
    ----------
    shape : tuple of int
        (phase steps,) for a 1-D pattern, (phase steps, partition steps) for a 2-D one.
    law : str
        "uniform", "gaussian", "power" or "inverse-square".
    draw : str
        "exact-count" or "bernoulli".
    acceleration : float
        Positions of the full grid / acquired positions, calibration included; at least 1. For a
        regular pattern the lattice step: calibration lines come on top.
    calibration : int or tuple of int
        Fully sampled central positions, per axis; 24 is 24 lines in 1-D, 24 x 24 in 2-D.
    seed : int
        The same seed gives the same pattern on any machine.
    **law_settings
        Any further key of a sampling entry: the law's parameters (``exponent``, ``width``, ...),
        ``elliptical``, ``partial_fourier``, or ``pattern`` for a regular family, which then stands
        in place of law and draw.

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
    return draw_entry(entry, shape, acceleration, seed)


def draw_entry(
    entry: dict[str, Any],
    shape: tuple[int, ...] | int,
    acceleration: float | None = None,
    seed: int = 0,
    *,
    frames: int = 0,
    identity: tuple[object, ...] = (),
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
        0 for one pattern for all frames.
    identity : tuple
        What the draw is for (scan, arm, draw number); takes part in the random stream.

    Returns
    -------
    Pattern

    Raises
    ------
    PatternError
        As :func:`draw_pattern`.
    """
    parsed = parse_entry(entry)
    grid = check_grid(shape)
    wanted = _acceleration(parsed, acceleration)
    calibration = check_calibration(parsed.calibration, grid)
    fraction = check_partial_fourier(parsed.partial_fourier, grid)
    certain = calibration_block(grid, calibration)
    shutter = partial_fourier_region(grid, fraction)
    if parsed.elliptical:
        shutter &= elliptical_shutter(grid)
    shutter |= certain
    settings: dict[str, Any] = {
        "pattern": parsed.pattern,
        **({"law": parsed.law, "draw": parsed.draw} if parsed.law else {}),
        **parsed.law_settings,
        **parsed.options,
        "acceleration": wanted,
        "calibration": list(calibration),
        "elliptical": parsed.elliptical,
        "partial_fourier": list(fraction),
        "per_axis": parsed.per_axis,
        "seed": _seed(seed),
        "identity": [str(part) for part in identity],
        "grid": list(grid),
    }
    probability = None
    if parsed.pattern == "random":
        assert wanted is not None
        quanta = _quanta(parsed, grid, wanted, certain, shutter)
        mask = _realise(parsed, quanta, seed, identity)
        probability = quanta / ONE
        settings["requested_count"] = round(int(np.prod(grid)) / wanted)
    else:
        mask = _regular(parsed, grid, wanted) & shutter | certain
    settings["count"] = int(mask.sum())
    return Pattern(
        mask=mask,
        probability=probability,
        calibration=calibration,
        shutter=None if shutter.all() else shutter,
        settings=settings,
    )


def _acceleration(parsed: Entry, acceleration: float | None) -> float | None:
    if acceleration is not None:
        return parse_entry({"acceleration": acceleration}).accelerations[0]
    if len(parsed.accelerations) == 1:
        return parsed.accelerations[0]
    if parsed.pattern == "full":
        return 1.0
    if "steps" in parsed.options:
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


def _quanta(
    parsed: Entry, grid: tuple[int, ...], acceleration: float, certain: Mask, shutter: Mask
) -> Quanta:
    density = law_density(
        grid,
        parsed.law,
        parsed.law_settings,
        elliptical=parsed.elliptical,
        per_axis=parsed.per_axis,
    )
    count = int(np.prod(grid)) / acceleration
    if parsed.draw != "bernoulli":
        count = round(count)
    return inclusion(density, count, certain=certain, allowed=shutter)


def _realise(parsed: Entry, quanta: Quanta, seed: int, identity: tuple[object, ...]) -> Mask:
    generator = stream(_seed(seed), "pattern", *identity)
    if parsed.draw == "bernoulli":
        return draws.bernoulli(quanta, generator)
    return draws.exact_count(quanta, generator)


def _regular(parsed: Entry, grid: tuple[int, ...], acceleration: float | None) -> Mask:
    if parsed.pattern == "full":
        if acceleration != 1:
            raise PatternError(
                f"Full sampling has acceleration 1, not {acceleration:g}.",
                "acceleration of the pattern 'full'",
                "Leave the acceleration out; partial Fourier and the shutter shorten it.",
            )
        return np.ones(grid, dtype=bool)
    return lattice(grid, lattice_steps(grid, acceleration, parsed.options.get("steps")))
