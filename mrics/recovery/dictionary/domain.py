"""Whether a scan is of the kind that a dictionary was trained on.

A prior from other anatomy can remove or invent detail. Patches of the scan are coded with as many
atoms as the training patches were; where their relative residuals lie far above the training
distribution the dictionary is outside its domain.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.recovery.dictionary.coding import Prepared
from mrics.recovery.dictionary.patches import Layout, cut, without_mean
from mrics.recovery.dictionary.store import CHECK_SPARSITY, Dictionary

Array = NDArray[Any]
#: share of training patches that lie above the level a scan's patches are counted at
_TAIL = 0.05
#: a plane is outside where this share of its patches lies above that level
OUTSIDE = 0.15
#: patches must hold this many times the energy of their noise to be judged
_CLEAR = 4.0
#: and this share of the largest patch energy
_STRONG = 1e-2
#: residual share that counts as no mismatch, however well the training was coded
_LEAST = 5e-3


@dataclass(frozen=True)
class DomainCheck:
    """Verdict on every plane.

    Attributes
    ----------
    planes : ndarray of float, shape (group,)
        Share of judged patches whose residual exceeds the training's 95 % point (0.05 expected).
    outside : ndarray of bool, shape (group,)
        Planes outside the domain.
    map : ndarray of float32, shape (group, u, v)
        Residual of the patch that starts at each place divided by the training's 95 % point; 0
        where the patch holds little but noise.
    sentence : str
        One line for the report.
    """

    planes: Array
    outside: NDArray[np.bool_]
    map: NDArray[np.float32]
    sentence: str


def relative_residuals(patches: Array, prepared: Prepared, noise: float = 0.0) -> Array:
    """Squared residuals at 6 atoms relative to the patch, expected noise energy taken away."""
    from mrics.recovery.dictionary.coding import pursue

    codes = pursue(patches, prepared, min(CHECK_SPARSITY, *prepared.atoms.shape))
    length = patches.shape[1]
    parts = 2 if np.iscomplexobj(patches) else 1
    whole = np.sum(np.abs(patches) ** 2, axis=1, dtype=np.float64) - parts * length * noise**2
    left = codes.residual - parts * max(0, length - CHECK_SPARSITY) * noise**2
    result: Array = np.maximum(left, 0) / np.maximum(whole, 1e-30)
    return result


def worth_judging(energy: Array, length: int, parts: int, noise: float) -> NDArray[np.bool_]:
    """Patches with clearly more energy than their noise, and than the flattest ones."""
    floor = max(_STRONG * float(energy.max(initial=0)), _CLEAR * parts * length * noise**2)
    found: NDArray[np.bool_] = energy > floor
    return found


def check_domain(
    dictionary: Dictionary, stack: Array, layout: Layout, noise: float = 0.0, stride: int = 2
) -> DomainCheck:
    """Compare coding residuals of a stack with those of the training.

    Parameters
    ----------
    dictionary : Dictionary
        With its training residuals.
    stack : ndarray of shape (plane, u, v)
        Recovered or reference images, smooth phase taken out; real atoms are compared on the real
        part.
    layout : Layout
        Of the dictionary's patches.
    noise : float
        Standard deviation of the real part of the image's noise; its energy is taken away.
    stride : int
        Step between judged patches.
    """
    _, u, v = stack.shape
    limit = max(float(np.quantile(dictionary.residuals, 1 - _TAIL)), _LEAST)
    if not np.iscomplexobj(dictionary.atoms):
        stack = stack.real
    prepared = Prepared(dictionary.atoms.astype(stack.dtype))
    grid = np.stack(np.meshgrid(np.arange(0, u, stride), np.arange(0, v, stride), indexing="ij"))
    spots = grid.reshape(2, -1).T
    picture = np.zeros((len(layout.groups), u, v), np.float32)
    shares = np.zeros(len(layout.groups))
    parts = 2 if np.iscomplexobj(stack) else 1
    for group in range(len(layout.groups)):
        places = np.concatenate([np.full((len(spots), 1), group), spots], axis=1)
        patches = without_mean(cut(stack, layout, places), layout.layers)
        energy = np.sum(np.abs(patches) ** 2, axis=1)
        judged = worth_judging(energy, layout.length, parts, noise)
        if not judged.any():
            continue
        ratio = relative_residuals(patches[judged], prepared, noise) / limit
        shares[group] = float(np.mean(ratio > 1))
        coarse = np.zeros(grid.shape[1:], np.float32)
        coarse[judged.reshape(coarse.shape)] = ratio
        picture[group] = coarse.repeat(stride, 0)[:u].repeat(stride, 1)[:, :v]
    outside = shares > OUTSIDE
    if outside.any():
        sentence = (
            f"outside its domain on {int(outside.sum())} of {len(outside)} planes (worst: "
            f"{100 * shares.max():.0f} % of patches code worse than 95 % of the training's): "
            "detail may be removed or invented"
        )
    else:
        sentence = (
            "inside the dictionary's domain on all planes (worst: "
            f"{100 * shares.max():.0f} % of patches code worse than 95 % of the training's)"
        )
    return DomainCheck(shares, outside, picture, sentence)
