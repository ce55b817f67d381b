"""Weights that choose themselves: rules, the search, and what is said of it.

A rule is a function of the weight that is least where the weight is right; the search walks it
down a logarithmic grid, so that ten times the right weight is as far away as a tenth.

* ``auto``: the error of the whole of k-space (see ``risk``), on 4 planes spread over those that
  hold signal; where everything was acquired, Stein's risk.
* ``held-out``, ``sure``, ``discrepancy``: the single rules, on the same planes.
* ``best``: the error of the magnitude against the reference. It uses the answer, so it says what a
  rule could reach, not what a scan without reference would give.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import Acquisition, frames_of, some_planes, with_sensitivities
from mrics.errors import RecoveryError
from mrics.recovery import risk
from mrics.recovery.contract import Certificate, Recovered
from mrics.recovery.fields import Settings
from mrics.recovery.settings import check_settings

Array = NDArray[Any]
Solve = Callable[[Acquisition, Settings, float], Recovered]
#: planes a rule looks at, counted over frames and held-out sets
PLANES = 4
#: where the search starts, in units of sigma, and how far it goes
START, LEAST, MOST = 0.2, 0.0125, 12.8
#: tolerance that is close enough to tell weights apart, at a third of the cost of 1e-3
_TOLERANCE = 1e-2


@dataclass(frozen=True)
class Choice:
    """A weight and how it was chosen.

    Attributes
    ----------
    weight : float
        In units of sigma, three significant digits.
    rule : str
        For the certificate.
    trials : int
        Weights that were tried.
    """

    weight: float
    rule: str
    trials: int


def choose_weight(
    solve: Solve,
    acquisition: Acquisition,
    settings: Settings,
    sigma: float,
    reference: Array | None = None,
    mask: NDArray[np.bool_] | None = None,
) -> Choice:
    """The weight that ``settings.weight`` asks for by a word.

    Parameters
    ----------
    solve : callable
        The method's ``solve``.
    acquisition : Acquisition
        The whole stack, with some signal.
    settings : Settings
        With a field ``weight`` that is a word.
    sigma : float
        Noise level that weights refer to.
    reference : ndarray of shape (plane, u, v), optional
        Fully sampled image, for "best".
    mask : ndarray of bool, same shape, optional
        Voxels that "best" counts.

    Raises
    ------
    RecoveryError
        Where a rule has nothing to go by: no reference, no centre of k-space, training scans that
        only a study knows.
    """
    word = str(getattr(settings, "weight"))  # noqa: B009
    run = _runner(solve, settings, sigma)
    if word == "trained":
        raise RecoveryError(
            'weight = "trained" is chosen by a study on its training scans, not by one recovery.',
            "weight",
            "Name training_scans in the protocol, or give the trained weight as a number.",
        )
    if word == "best":
        weight, trials = search_weight(_error_to(reference, mask, acquisition, run))
        return Choice(weight, f"best: chosen with the answer in hand, {trials} trials", trials)
    if getattr(settings, "tolerance", 1.0) < _TOLERANCE:
        loose: Any = {"tolerance": _TOLERANCE}
        run = _runner(solve, replace(settings, **loose), sigma)
    part, places = _representative(acquisition)
    looked = f"on {places} of {acquisition.shape[0] // frames_of(acquisition)} planes"
    function, name = _rule(word, part, run, sigma)
    weight, trials = search_weight(function)
    name = name if name.startswith(word) else f"{word}: {name}"
    return Choice(weight, f"{name}, {trials} trials {looked}", trials)


def frozen(method: str, settings: Mapping[str, Any], certificate: Certificate) -> dict[str, Any]:
    """Settings with the weight that a first recovery chose, for recoveries that must share it."""
    names = {entry.name for entry in fields(check_settings(method, settings))}
    fixed = dict(settings)
    for name in ("weight", "damping"):
        if name in names and certificate.weight is not None:
            fixed[name] = certificate.weight
    return fixed


def search_weight(function: Callable[[float], float], start: float = START) -> tuple[float, int]:
    """Weight of least ``function`` on a logarithmic grid: steps of 4, then 2, then a parabola.

    Parameters
    ----------
    function : callable
        Of the weight; one minimum is found where there are several.
    start : float
        First weight tried.

    Returns
    -------
    weight : float
        From ``LEAST`` to ``MOST``, three significant digits.
    trials : int
        Calls of ``function``.
    """
    known: dict[float, float] = {}

    def at(step: float) -> float:
        if step not in known:
            known[step] = function(start * 2.0**step)
        return known[step]

    low, high = (2.0 * round(np.log2(end / start) / 2) for end in (LEAST, MOST))
    centre = 0.0
    for width in (2.0, 1.0):
        while True:
            sides = [s for s in (centre - width, centre + width) if low <= s <= high]
            best = min((centre, *sides), key=at)
            if best == centre or width == 1.0:
                centre = best
                break
            centre = best
    if not low < centre < high:
        return _rounded(start * 2.0**centre), len(known)
    left, right = at(centre - 1), at(centre + 1)
    bend = left + right - 2 * at(centre)
    shift = 0.5 * (left - right) / bend if bend > 0 else 0.0
    return _rounded(start * 2.0 ** (centre + float(np.clip(shift, -0.5, 0.5)))), len(known)


def _rounded(weight: float) -> float:
    return float(f"{weight:.3g}")


def _runner(solve: Solve, settings: Settings, sigma: float) -> risk.Recover:
    def run(acquisition: Acquisition, weight: float) -> Array:
        changed: Any = {"weight": weight}
        return solve(acquisition, replace(settings, **changed), sigma).image

    return run


def _rule(
    word: str, part: Acquisition, run: risk.Recover, sigma: float
) -> tuple[Callable[[float], float], str]:
    """The function that a word minimises, and its name."""
    complete = bool(part.mask[part.pattern_index].all())
    if word == "sure" or (word == "auto" and complete):
        return risk.stein_risk(part, run, sigma), "Stein's risk of the measured samples"
    if word == "discrepancy":
        return risk.discrepancy(part, run, sigma), "discrepancy: misfit equal to the noise"
    split = risk.split_samples(part)
    if word == "held-out":
        return risk.held_out_risk(split, run), "held-out samples"
    return risk.whole_risk(split, run, sigma), "held-out samples and misfit"


def _representative(acquisition: Acquisition) -> tuple[Acquisition, int]:
    """Few planes for a rule, all frames of each, and how many different places they are.

    Spread over the places that hold at least half the median energy of those with signal. Where
    the stack has fewer than ``PLANES`` they are taken again, for other held-out samples.
    """
    frames = frames_of(acquisition)
    apart = acquisition.shape[0] // frames
    energy = np.zeros(apart)
    for plane in range(acquisition.shape[0]):
        samples = np.asarray(acquisition.kspace[plane])
        energy[plane % apart] += float(np.vdot(samples, samples).real)
    full = np.flatnonzero(energy >= 0.5 * np.median(energy[energy > 0]))
    wanted = max(1, PLANES // frames)
    count = min(wanted, len(full))
    spread = full[((np.arange(count) + 0.5) * len(full) / count).astype(int)]
    # The middle first: its divergence stands for that of the others.
    places = np.tile(np.roll(spread, -(count // 2)), -(-wanted // count))
    chosen = [frame * apart + int(place) for frame in range(frames) for place in places]
    part = some_planes(acquisition, chosen)
    if part.channels > 1 and part.sensitivities is None:
        part = with_sensitivities(part)
    return part, count


def _error_to(
    reference: Array | None,
    mask: NDArray[np.bool_] | None,
    acquisition: Acquisition,
    run: risk.Recover,
) -> Callable[[float], float]:
    """Squared error of the magnitude in the mask."""
    if reference is None or reference.shape != acquisition.shape:
        got = "none" if reference is None else f"one of shape {reference.shape}"
        raise RecoveryError(
            f'weight = "best" compares with the fully sampled image, and got {got} for planes of '
            f"shape {acquisition.shape}.",
            "reference",
            'Give the reference, or take weight = "auto".',
        )
    inside = slice(None) if mask is None else mask
    wanted = np.abs(reference[inside])

    def error(weight: float) -> float:
        difference = np.abs(run(acquisition, weight)[inside]) - wanted
        return float(np.vdot(difference, difference))

    return error
