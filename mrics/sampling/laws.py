"""Laws: how densely a random pattern samples each place in k-space.

A law is a function of the normalised radius (or, ``per_axis``, the product over axes of the same
function of |k| on each) with its parameters, or a map of its own: the k-space energy of training
scans, or a table. Only its shape matters: the scale is solved for the requested count
(:mod:`mrics.sampling.probability`). Radius 1 is the outer border of the grid's last cell, at the
middle of an edge; corners without a shutter lie further out.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from mrics.errors import PatternError
from mrics.sampling.grid import Field, axis_coordinates, radius


@dataclass(frozen=True)
class Parameter:
    """One number a law takes, with its default and allowed range (ends included)."""

    default: float
    low: float
    high: float


@dataclass(frozen=True)
class Law:
    """A density over normalised radius t in [0, 1], its parameters, and the key of its map.

    A law with a ``source`` takes a map of the grid's shape in place of the radius.
    """

    density: Callable[..., Field]
    parameters: dict[str, Parameter] = field(default_factory=dict)
    source: str = ""


def _uniform(t: Field, _step: float) -> Field:
    return np.ones_like(t)


def _gaussian(t: Field, _step: float, width: float) -> Field:
    return np.exp(-0.5 * (t / width) ** 2)


def _power(t: Field, _step: float, exponent: float, floor: float) -> Field:
    return floor + (1 - floor) * np.maximum(1 - t, 0.0) ** exponent


def _inverse_square(t: Field, step: float) -> Field:
    return 1 / np.maximum(t, step) ** 2


def _energy(energy: Field, _step: float, power: float, floor: float) -> Field:
    return floor + (1 - floor) * (energy / energy.max()) ** power


def _table(table: Field, _step: float) -> Field:
    return table / table.max()


LAWS: dict[str, Law] = {
    "uniform": Law(_uniform),
    "gaussian": Law(_gaussian, {"width": Parameter(0.3, 0.01, 10.0)}),
    # Lustig, Donoho, Pauly 2007, MRM 58:1182-1195
    "power": Law(
        _power, {"exponent": Parameter(3.0, 0.0, 20.0), "floor": Parameter(0.0, 0.0, 1.0)}
    ),
    # Krahmer & Ward 2014, IEEE Trans Image Process 23:612-622; 1/|k|^2 from |k| = 1 outwards
    "inverse-square": Law(_inverse_square),
    # mean k-space energy of training scans, to a power: 0.5 is in proportion to amplitude
    "energy": Law(
        _energy,
        {"power": Parameter(0.5, 0.0, 4.0), "floor": Parameter(0.0, 0.0, 1.0)},
        source="training",
    ),
    "table": Law(_table, source="table"),
}


def law_parameters(law: str, settings: dict[str, Any]) -> dict[str, float]:
    """The law's parameters with defaults filled in, each checked against its range.

    Raises
    ------
    PatternError
        For a value that is no number or out of range.
    """
    values = {}
    for key, parameter in LAWS[law].parameters.items():
        value = settings.get(key, parameter.default)
        number = isinstance(value, int | float | np.number) and not isinstance(value, bool)
        if not number or not parameter.low <= value <= parameter.high:
            raise PatternError(
                f"{key} = {value!r} is outside {parameter.low:g} ... {parameter.high:g}.",
                f"{key} of the law {law!r}",
                f"Give a number in that range; the default is {parameter.default:g}.",
            )
        values[key] = float(value)
    return values


def law_density(
    shape: tuple[int, ...],
    law: str,
    settings: dict[str, Any],
    *,
    elliptical: bool = False,
    per_axis: bool = False,
    source: Field | None = None,
) -> Field:
    """Density of a law on a grid, any scale.

    Parameters
    ----------
    shape : tuple of int
        Grid shape.
    law : str
        A key of :data:`LAWS`.
    settings : dict
        The law's parameters.
    elliptical : bool
        With the shutter, radius 1 is the end of the law; without it the corner is.
    per_axis : bool
        Product over axes instead of a function of the radius.
    source : ndarray, optional
        Map of the law that takes one (see :mod:`mrics.sampling.source`).

    Raises
    ------
    PatternError
        For parameters out of range, and a density that is negative or not finite anywhere.
    """
    density = _density(shape, law, settings, elliptical, per_axis, source)
    usable = np.isfinite(density) & (density >= 0)
    if not usable.all():
        at = tuple(int(i) for i in np.argwhere(~usable)[0])
        raise PatternError(
            f"The law {law!r} gives {int((~usable).sum())} densities that are negative or not "
            f"finite, the first {density[at]:g}.",
            f"law {law!r}, index {at}",
            "Give the law other parameters, or a density of 0 or more everywhere.",
        )
    return density


def _density(
    shape: tuple[int, ...],
    law: str,
    settings: dict[str, Any],
    elliptical: bool,
    per_axis: bool,
    source: Field | None,
) -> Field:
    parameters = law_parameters(law, settings)
    function = LAWS[law].density
    if source is not None:
        return function(source, 0.0, **parameters)
    if per_axis:
        product = np.ones(shape)
        for axis, t in enumerate(axis_coordinates(shape, 0.5)):
            reshaped = [1] * len(shape)
            reshaped[axis] = -1
            step = 1 / (shape[axis] / 2 + 0.5)
            product = product * function(t, step, **parameters).reshape(reshaped)
        return product
    # the law ends at the shutter, without one at the corner
    reach = 1.0 if elliptical or len(shape) == 1 else float(np.sqrt(2.0))
    step = 1 / (max(shape) / 2 + 0.5)
    return function(radius(shape, 0.5) / reach, step / reach, **parameters)
