"""Patterns ranked by what their data hold of small features, before any recovery is chosen."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import QualityError
from mrics.quality.observers.background import fit_spectrum
from mrics.quality.observers.ideal import ideal_observer
from mrics.quality.observers.tasks import TASKS, Task
from mrics.sampling import Pattern

Array = NDArray[Any]


def rank_patterns(
    patterns: Mapping[str, Pattern],
    training: Array,
    voxel_mm: tuple[float, float],
    sigma: float,
    *,
    sizes_mm: Sequence[float] = (2.0, 3.0, 5.0),
    contrast: float = 20.0,
    mask: NDArray[np.bool_] | None = None,
    sensitivities: Array | None = None,
) -> list[dict[str, Any]]:
    """D' of the ideal observer for both tasks at several sizes, side by side, with ranks.

    Two points against one line are set along u and along v; the harder of the two counts.

    Parameters
    ----------
    patterns : mapping of name to Pattern
        On the planes' grid, one frame each.
    training : ndarray of shape (plane, u, v)
        Fully sampled images the background is fitted to.
    voxel_mm : tuple of float
        Voxel size along u and v.
    sigma : float
        Standard deviation of the real part of one k-space sample, positive.
    sizes_mm : sequence of float
    contrast : float
        In per cent of the mean magnitude in the mask.
    mask : ndarray of bool, shape (plane, u, v), optional
    sensitivities : ndarray of shape (channel, u, v), optional
        Whitened.

    Returns
    -------
    list of dict
        One row per pattern, task and size: ``pattern``, ``acceleration``, ``task``, ``size_mm``,
        ``d_prime`` (anatomical background), ``noise_only`` (known background, for information
        alone) and ``rank`` among the patterns, 1 for the highest ``d_prime``.

    Raises
    ------
    QualityError
        Without patterns or sizes; else as for the background's fit and the ideal observer.
    """
    if not patterns or not sizes_mm:
        raise QualityError(
            f"{len(patterns)} patterns and {len(sizes_mm)} sizes leave nothing to rank.",
            "patterns, sizes_mm",
            "Give at least one of each.",
        )
    size = np.abs(training)
    level = float(size[mask].mean() if mask is not None else size.mean())
    amplitude = level * contrast / 100.0
    spectrum = fit_spectrum(training, voxel_mm, mask=mask, sigma=sigma)
    keys = [(kind, mm) for kind in TASKS for mm in sizes_mm]
    tasks = [
        Task(kind, mm, amplitude, axis)
        for kind, mm in keys
        for axis in ("u", "v")[: 1 if kind == "detection" else 2]
    ]
    shape = (training.shape[1], training.shape[2])
    found = ideal_observer(
        list(patterns.values()), tasks, shape, voxel_mm, sigma, spectrum,
        sensitivities=sensitivities,
    )  # fmt: skip
    rows = []
    for kind, mm in keys:
        mine = [i for i, task in enumerate(tasks) if (task.kind, task.size_mm) == (kind, mm)]
        d_prime = found.anatomical[:, mine].min(axis=1)
        known = found.noise_only[:, mine].min(axis=1)
        ranks = 1 + (d_prime[None, :] > d_prime[:, None]).sum(axis=1)
        rows += [
            {
                "pattern": name,
                "acceleration": pattern.acceleration,
                "task": kind,
                "size_mm": float(mm),
                "d_prime": float(d_prime[at]),
                "noise_only": float(known[at]),
                "rank": int(ranks[at]),
            }
            for at, (name, pattern) in enumerate(patterns.items())
        ]
    return rows
