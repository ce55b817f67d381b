"""All frames of a place together: their planes side by side, and one solver over them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import Encoding, frames_of
from mrics.encoding.acquisition import Acquisition
from mrics.recovery.plane import PlaneModel, each_plane, phase_centre, scale_unit
from mrics.recovery.splitting import RELAX, PlaneResult, Trace

Array = NDArray[Any]


class Reordered:
    """An array with its first axis in another order, read as it is sliced."""

    def __init__(self, source: Any, order: NDArray[np.intp]) -> None:
        self.source, self.order = source, order
        self.shape = (len(order), *source.shape[1:])
        self.dtype = source.dtype

    def __len__(self) -> int:
        return len(self.order)

    def __getitem__(self, key: Any) -> Array:
        first, *rest = key if isinstance(key, tuple) else (key,)
        index = self.order[first]
        if isinstance(index, np.ndarray):
            picked = np.stack([np.asarray(self.source[i]) for i in index])
            return picked[(slice(None), *rest)] if rest else picked
        picked = np.asarray(self.source[index])
        return picked[tuple(rest)] if rest else picked


def by_place(acquisition: Acquisition) -> Acquisition:
    """The same planes place by place, all frames of a place next to each other; nothing is read."""
    frames = frames_of(acquisition)
    if frames == 1:
        return acquisition
    planes = acquisition.shape[0]
    order = np.arange(planes).reshape(frames, -1).T.ravel()
    kspace: Any = Reordered(acquisition.kspace, order)
    maps: Any = acquisition.sensitivities
    if maps is not None and maps.shape[0] > 1:
        maps = Reordered(maps, order % maps.shape[0])
    mixing = acquisition.compression
    if mixing is not None and mixing.shape[0] > 1:
        mixing = mixing[order]
    return replace(
        acquisition,
        kspace=kspace,
        pattern_index=acquisition.pattern_index[order],
        sensitivities=maps,
        compression=mixing,
        axes=None,
        volume_shape=acquisition.shape,
    )


def by_frame(image: Array, frames: int) -> Array:
    """Back from :func:`by_place`: planes frame by frame."""
    grid = image.shape[1:]
    return np.ascontiguousarray(image.reshape(-1, frames, *grid).swapaxes(0, 1)).reshape(-1, *grid)


class JointPenalty(Protocol):
    """A penalty that couples frames; like :class:`splitting.Penalty` with a list of images."""

    symbol: Array
    padded: tuple[int, int]

    def set_weight(self, weight: float, images: list[Array]) -> None:
        """Thresholds for ``weight``; the state becomes K images."""

    def pull(self, images: list[Array]) -> None:
        """Fill every image (float view) with its part of rho K^H h."""

    def push(self, images: list[Array], relax: float) -> Array:
        """Move the state to the images (which stay); sums as in ``split_bands``."""


class JointSplitting:
    """:class:`splitting.Splitting` for the frames of one place."""

    def __init__(self, models: list[PlaneModel], penalty: JointPenalty) -> None:
        self.models, self.penalty = models, penalty

    def run(
        self, active: list[int], weight: float, iterations: int, tolerance: float
    ) -> PlaneResult:
        """Minimise over the frames ``active``, loaded in their models, whose images result."""
        models = [self.models[f] for f in active]
        images = [model.flat for model in models]
        for model in models:
            model.start()
        self.penalty.set_weight(weight, images)
        for model in models:
            model.couple(self.penalty.symbol)
        trace = Trace()
        while trace.done < iterations and trace.gap > tolerance:
            self.penalty.pull(images)
            terms = np.zeros(4)
            for model in models:
                one = np.array(model.solve(self.penalty.symbol, RELAX))
                one[3] **= 2
                terms += one
            terms[3] **= 0.5
            sums = self.penalty.push(images, RELAX)
            trace.add(terms, sums, *(model.image for model in models))
        return trace.result()


def run_places(
    acquisition: Acquisition,
    make: Callable[[tuple[int, int], Any, int], JointPenalty],
    threshold: float,
    iterations: int,
    tolerance: float,
    hybrid: bool = False,
    phase: str = "free",
    finish: Callable[[JointPenalty, list[int], int, float], None] | None = None,
) -> tuple[Array, list[PlaneResult]]:
    """Minimise for every place with the weight ``threshold`` in the data's unit.

    Parameters
    ----------
    make : callable
        (u, v), real dtype and number of frames to a penalty.
    hybrid : bool
        The penalty's symbol is a number, so that a full readout needs no transform.
    phase : {"free", "smooth"}
        See :func:`plane.phase_centre`.
    finish : callable, optional
        Penalty, its frames, place and unit of its images, after a place is done.

    Returns
    -------
    image : ndarray of shape (plane, u, v)
        Planes frame by frame.
    results : list of PlaneResult
        One for every place.
    """
    frames = frames_of(acquisition)
    placed = by_place(acquisition)
    centre = phase_centre(acquisition, phase)
    dtype = acquisition.kspace.dtype
    unit = scale_unit(acquisition)
    grid = acquisition.shape[1:]
    image = np.zeros(acquisition.shape, dtype)

    def make_worker() -> JointSplitting:
        penalty = make(grid, dtype.type(0).real.dtype, frames)
        models = [
            PlaneModel((acquisition.channels, *grid), dtype, penalty.padded, centre)
            for _ in range(frames)
        ]
        return JointSplitting(models, penalty)

    def one(
        worker: JointSplitting, encoding: Encoding, data: Array, i: int, plane: int
    ) -> PlaneResult:
        active = [
            f for f in range(frames) if worker.models[f].load(encoding, data, i + f, unit, hybrid)
        ]
        if not active:
            return PlaneResult()
        result = worker.run(active, threshold / unit, iterations, tolerance)
        for f in active:
            worker.models[f].write(worker.models[f].image, unit, image[plane + f])
        if finish is not None:
            finish(worker.penalty, active, plane // frames, unit)
        return result.scaled(unit)

    results = each_plane(placed, make_worker, one, frames)
    return by_frame(image, frames), results
