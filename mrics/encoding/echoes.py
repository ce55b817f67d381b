"""Signal decay over the echo train: what the order of acquisition does to k-space."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from mrics.errors import AcquisitionError
from mrics.sampling.pattern import Pattern


def echo_weights(pattern: Pattern, echo_spacing_ms: float, decay_ms: float) -> NDArray[np.float64]:
    """Weight of every pattern position by the echo that acquires it.

    A position of echo e (counted from 0) is weighted by exp(-(e - e0) * spacing / decay), where e0
    is the echo that acquires the position nearest to zero frequency: contrast is that of the
    effective echo time, which the scan already has, and only the blur is added. ``decay_ms`` is
    one T2 (or T2*) for the whole object.

    Parameters
    ----------
    pattern : Pattern
        With ``order``: (shot, echo) of each acquired position.
    echo_spacing_ms : float
        Time from echo to echo, above 0.
    decay_ms : float
        T2 of spin-echo trains, T2* of gradient-echo trains, above 0.

    Returns
    -------
    ndarray, shape of ``pattern.mask``
        1 where nothing is acquired.

    Raises
    ------
    AcquisitionError
        Where the pattern has no order, or a time is not above 0.
    """
    if pattern.order is None:
        raise AcquisitionError(
            "The pattern has no order of acquisition, so its echoes are not known.",
            "pattern.order",
            "Order the pattern into shots and echoes first.",
        )
    for name, value in (("echo_spacing_ms", echo_spacing_ms), ("decay_ms", decay_ms)):
        if not np.isfinite(value) or value <= 0:
            raise AcquisitionError(
                f"{name} is {value}, which is not a time above 0.", name, "Give it in ms."
            )
    places = np.argwhere(pattern.mask)
    if len(pattern.order) != len(places):
        raise AcquisitionError(
            f"The order lists {len(pattern.order)} positions, the pattern acquires {len(places)}.",
            "pattern.order",
            "Order the pattern again.",
        )
    echo = pattern.order[:, 1].astype(np.float64)
    grid = places[:, 1:] if pattern.frames else places
    centre = np.array([n // 2 for n in pattern.grid])
    size = np.array(pattern.grid)
    distance = (((grid - centre) / size) ** 2).sum(axis=1)
    weights = np.ones(pattern.mask.shape)
    frame = places[:, 0] if pattern.frames else np.zeros(len(places), np.intp)
    for f in np.unique(frame):
        own = np.flatnonzero(frame == f)
        effective = echo[own[np.argmin(distance[own])]]
        decay = np.exp(-(echo[own] - effective) * echo_spacing_ms / decay_ms)
        weights[tuple(places[own].T)] = decay
    return weights
