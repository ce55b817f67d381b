"""From inclusion probabilities to masks: one draw, or a series of frames."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np

from mrics.sampling.draws import bernoulli, exact_count, shuffle
from mrics.sampling.grid import Mask
from mrics.sampling.probability import BITS, ONE, Quanta, inclusion


@dataclass(frozen=True)
class Drawn:
    """A mask (with a leading frame axis for a series) and what the draw says of it."""

    mask: Mask
    facts: dict[str, Any] = field(default_factory=dict)


def realise(
    draw: str,
    quanta: Quanta,
    calibration: Mask,
    generator: np.random.Generator,
    law: Quanta | None = None,
) -> Drawn:
    """One draw by name (see ``DRAWS``); ``law`` as in :func:`mrics.sampling.disc.disc_draw`."""
    if draw == "poisson-disc":
        from mrics.sampling.disc import disc_draw

        disc = disc_draw(quanta, calibration, generator, law)
        return Drawn(disc.mask, {"disc_c": disc.c})
    if draw == "jittered":
        from mrics.sampling.stratified import jittered

        return Drawn(jittered(quanta, generator))
    if draw == "low-discrepancy":
        from mrics.sampling.stratified import low_discrepancy

        return Drawn(low_discrepancy(quanta, generator))
    return Drawn({"bernoulli": bernoulli, "exact-count": exact_count}[draw](quanta, generator))


def realise_frames(
    draw: str,
    sharing: str,
    frames: int,
    quanta: Quanta,
    calibration: Mask,
    generator: np.random.Generator,
) -> Drawn:
    """A draw for every frame.

    Parameters
    ----------
    draw : str
        Name of the draw.
    sharing : str
        "complementary": a position of probability p <= 1/frames is acquired at most once, others
        floor(p frames) or one more times, as far as the draw allows. "independent": frames know
        nothing of each other. "same": one mask for all.
    frames : int
        Number of frames.
    quanta, calibration, generator
        As in :func:`realise`.

    Returns
    -------
    Drawn
        Mask of shape (frames, ...); facts hold the positions of the union and their share.
    """
    if sharing == "same":
        one = realise(draw, quanta, calibration, generator)
        masks, facts = np.repeat(one.mask[None], frames, axis=0), one.facts
    elif sharing == "independent":
        drawn = [realise(draw, quanta, calibration, generator) for _ in range(frames)]
        masks, facts = _stacked(drawn)
    elif draw == "exact-count":
        masks, facts = _interleaved_combs(frames, quanta, generator), {}
    elif draw == "bernoulli":
        masks, facts = _turned_numbers(frames, quanta, generator), {}
    else:
        masks, facts = _conditional(draw, frames, quanta, calibration, generator)
    union = masks.any(axis=0)
    facts |= {"union_count": int(union.sum()), "union_coverage": float(union.mean())}
    return Drawn(masks, facts)


def _stacked(drawn: list[Drawn]) -> tuple[Mask, dict[str, Any]]:
    facts = {key: [one.facts[key] for one in drawn] for key in drawn[0].facts}
    return np.stack([one.mask for one in drawn]), facts


def _interleaved_combs(frames: int, quanta: Quanta, generator: np.random.Generator) -> Mask:
    """Systematic sampling with combs a frames-th of a step apart.

    All combs together are one comb of spacing 1/frames, so a length p holds floor(p frames) or one
    more of its teeth, each of another frame.
    """
    flat = quanta.ravel()
    order = shuffle(flat.size, generator)
    start = int(generator.bit_generator.random_raw()) >> (64 - BITS)
    ends = np.cumsum(flat[order])
    masks = np.zeros((frames, flat.size), dtype=bool)
    for frame, tooth in enumerate(shuffle(frames, generator)):
        offset = (start + (int(tooth) * ONE) // frames) % ONE
        masks[frame, order[np.diff((ends + offset) // ONE, prepend=0) > 0]] = True
    return masks.reshape(frames, *quanta.shape)


def _turned_numbers(frames: int, quanta: Quanta, generator: np.random.Generator) -> Mask:
    """Independent positions whose uniform number is turned by p from frame to frame."""
    raw = np.asarray(generator.bit_generator.random_raw(quanta.size), dtype=np.uint64)
    number = (raw >> np.uint64(64 - BITS)).astype(np.int64).reshape(quanta.shape)
    return np.stack([(number - frame * quanta) % ONE < quanta for frame in range(frames)])


def _conditional(
    draw: str, frames: int, quanta: Quanta, calibration: Mask, generator: np.random.Generator
) -> tuple[Mask, dict[str, Any]]:
    """Frame after frame from probabilities given what earlier frames took.

    Within a cycle of floor(1/p) frames a position is not taken twice: after j frames of the cycle
    an unused one has p/(1 - j p), which makes p in every frame. Rescaling to the frame's count
    moves this by the little that the sum of conditional probabilities strays.
    """
    p = quanta / ONE
    cycle = np.floor(1 / np.maximum(p, 1 / (2 * frames + 1))).astype(np.int64)
    used = np.zeros(quanta.shape, dtype=bool)
    certain = quanta == ONE
    drawn = []
    for frame in range(frames):
        at = frame % cycle
        used &= at != 0
        weight = np.where(used, 0.0, p / np.maximum(1 - at * p, p))
        now = inclusion(weight, int(quanta.sum()) // ONE, certain=certain)
        drawn.append(realise(draw, now, calibration, generator, law=quanta))
        used |= drawn[-1].mask
    return _stacked(drawn)
