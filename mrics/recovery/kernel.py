"""Missing samples of regular patterns from their neighbours in all channels (GRAPPA).

Every missing sample y_c(k) is a fixed combination of the lattice samples around it,

    y_c(k) = sum over sources j, channels d of w_cjd y_d(k + s_j),

with one set of weights per place k takes in the lattice cell. Weights minimise

    ||X w - t||^2 + damping * lambda_max(X^H X) ||w||^2

over all positions of the calibration region. Sources are, on each of the nearest lattice lines, the
nearest lattice samples; on lattices shifted from line to line they shift with the lines.

Sources: Griswold et al. 2002, Magn Reson Med 47:1202-1210, doi 10.1002/mrm.10171; two-dimensional
and shifted lattices: Breuer et al. 2006, Magn Reson Med 55:549-556, doi 10.1002/mrm.20787.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import Encoding, blocks
from mrics.encoding.acquisition import Acquisition
from mrics.encoding.calibration import calibration_box
from mrics.encoding.channels import channel_mixing, root_sum_of_squares
from mrics.encoding.lattice import Lattice, find_lattice
from mrics.errors import AcquisitionError, RecoveryError
from mrics.numerics import ifft_planes, map_blocks
from mrics.recovery.contract import Certificate, Recovered
from mrics.recovery.settings import Kernel

Array = NDArray[Any]


@dataclass(frozen=True)
class _Group:
    """Targets that share one set of sources.

    Attributes
    ----------
    sources : ndarray of int, shape (sources, 2)
        Lattice vectors from the cell's lattice point.
    targets : ndarray of int, shape (targets, 2)
        Places in the cell.
    """

    sources: NDArray[np.int64]
    targets: NDArray[np.int64]

    @property
    def span(self) -> tuple[int, int]:
        """Extent along u and v of sources and targets together."""
        both = np.concatenate([self.sources, self.targets])
        extent = both.max(axis=0) - both.min(axis=0) + 1
        return int(extent[0]), int(extent[1])


def solve(acquisition: Acquisition, settings: Kernel, sigma: float) -> Recovered:
    """Image of the completed k-space, channels combined as ``settings.combine`` says.

    Raises
    ------
    RecoveryError
        Where the pattern is not regular, or the calibration region is too small for the kernel.
    """
    try:
        lattice = find_lattice(acquisition, shutter=True)
        box = calibration_box(acquisition)
    except AcquisitionError as error:
        raise RecoveryError(error.what, error.where, error.fix) from error
    u, v = acquisition.shape[1:]
    groups = _groups(lattice, settings.lines, settings.samples)
    matrix = channel_mixing(acquisition)
    channels = acquisition.channels if matrix is None else matrix.shape[1]
    for group in groups:
        _check_size(group, box, channels, one_axis=acquisition.mask.shape[2] == 1)
    shutter = acquisition.pattern.shutter
    allowed = np.ones((u, v), bool)
    if shutter is not None:
        allowed &= shutter.reshape(u, -1)
    fill = _Fill(groups, lattice, box, allowed)
    image = np.zeros(acquisition.shape, acquisition.kspace.dtype)
    back = (-(u // 2), -(v // 2))
    for planes, encoding, data in blocks(acquisition):

        def one(
            row: int, encoding: Encoding = encoding, data: Array = data, first: int = planes.start
        ) -> None:
            centred = np.roll(data[row], (u // 2, v // 2), axis=(1, 2))
            whole = fill.complete(centred, settings.damping)
            measured = np.broadcast_to(
                encoding.mask[0 if len(encoding.mask) == 1 else row], (1, u, v)
            )
            whole = np.where(measured, data[row], np.roll(whole, back, axis=(1, 2)))
            image[first + row] = _combined(ifft_planes(whole, True), encoding, row, settings)

        map_blocks(one, range(encoding.in_shape[0]))
    note = f"damping {settings.damping:g} of the calibration's largest eigenvalue"
    certificate = Certificate("kernel", weight=None, weight_rule="given", note=note)
    return Recovered(image, certificate)


def _combined(images: Array, encoding: Encoding, row: int, settings: Kernel) -> Array:
    maps = encoding.sensitivities
    if maps is None:
        return np.asarray(images[0])
    if settings.combine == "root-sum-of-squares":
        return root_sum_of_squares(images, axis=0)
    one = maps[row if maps.shape[0] > 1 else 0]
    energy = (one.real**2 + one.imag**2).sum(axis=0)
    top = (one.conj() * images).sum(axis=0)
    return np.divide(top, energy, out=np.zeros_like(top), where=energy > 0)


def _groups(lattice: Lattice, lines: int, samples: int) -> list[_Group]:
    """Targets of one lattice cell, grouped by the sources they take."""
    found: dict[bytes, tuple[NDArray[np.int64], list[tuple[int, int]]]] = {}
    for tu in range(lattice.steps[0]):
        for tv in range(lattice.steps[1]):
            if tu == tv == 0:
                continue
            sources = _sources(lattice, (tu, tv), lines, samples)
            found.setdefault(sources.tobytes(), (sources, []))[1].append((tu, tv))
    return [_Group(s, np.array(t, dtype=np.int64)) for s, t in found.values()]


def _sources(
    lattice: Lattice, target: tuple[int, int], lines: int, samples: int
) -> NDArray[np.int64]:
    """Lattice vectors around a place of the cell: nearest lines, nearest samples on each."""
    reach = lines + 2
    m = np.arange(-reach, reach + 1)
    chosen = m[_nearest(np.abs(m * lattice.steps[0] - target[0]), lines)]
    result = []
    for line in chosen:
        n = np.arange(-samples - lattice.shift - 2, samples + lattice.shift + 3)
        n = n - (line * lattice.shift) // lattice.steps[1]
        along = line * lattice.shift + n * lattice.steps[1]
        for place in along[_nearest(np.abs(along - target[1]), samples)]:
            result.append((line * lattice.steps[0], place))
    return np.array(sorted(result), dtype=np.int64)


def _nearest(distance: NDArray[np.int64], count: int) -> NDArray[np.intp]:
    """Indices of the nearest; one fewer where the last would have an equally near twin."""
    order = np.argsort(distance, kind="stable")
    if count > 1 and distance[order[count - 1]] == distance[order[count]]:
        count -= 1
    return order[:count]


def _check_size(group: _Group, box: tuple[slice, slice], channels: int, *, one_axis: bool) -> None:
    size = [b.stop - b.start for b in box]
    span = group.span
    unknowns = len(group.sources) * channels
    equations = max(0, size[0] - span[0] + 1) * max(0, size[1] - span[1] + 1)
    if equations >= unknowns:
        return
    if one_axis:
        per_line = size[1] - span[1] + 1
        least = f"{span[0] - 1 + -(-unknowns // max(1, per_line))} lines"
    else:
        side = int(np.ceil(np.sqrt(unknowns)))
        least = f"{span[0] - 1 + side} x {span[1] - 1 + side} positions"
    raise RecoveryError(
        f"A calibration region of {size[0]} x {size[1]} samples gives {equations} equations for "
        f"{unknowns} kernel weights ({len(group.sources)} sources x {channels} channels).",
        "calibration",
        f"The smallest region for this kernel is {least}; or take a smaller kernel or fewer "
        "channels.",
    )


class _Fill:
    """Index tables of one pattern, shared by all planes."""

    def __init__(
        self,
        groups: list[_Group],
        lattice: Lattice,
        box: tuple[slice, slice],
        allowed: NDArray[np.bool_],
    ) -> None:
        u, v = allowed.shape
        self.lattice = lattice.mask(u, v)
        # A lattice point may lie off the grid by its targets' reach, its sources by theirs again.
        reach = [np.abs(g.sources).max(axis=0) + g.targets.max(axis=0) for g in groups]
        self.pad = np.max(reach, axis=0) if reach else np.zeros(2, np.int64)
        pu, pv = (int(p) for p in self.pad)
        self.width = v + 2 * pv
        # Lattice points of the padded grid: those outside the grid still serve targets inside.
        rows, columns = np.divmod(np.arange((u + 2 * pu) * self.width), self.width)
        shifted = Lattice(
            lattice.steps, lattice.shift, (lattice.origin[0] + pu, lattice.origin[1] + pv)
        )
        points = np.flatnonzero(shifted.mask(u + 2 * pu, self.width).ravel())
        place = np.full((u + 2 * pu, self.width), -1)
        place[pu : pu + u, pv : pv + v] = np.where(allowed, np.arange(u * v).reshape(u, v), -1)
        self.groups = []
        for group in groups:
            sources = group.sources @ (self.width, 1)
            targets = group.targets @ (self.width, 1)
            spots = self._targets(points, rows, columns, group, place)
            needed = (spots >= 0).any(axis=0)
            chosen = points[needed]
            inside = self._inside(group, box)
            self.groups.append(
                (
                    chosen[:, None] + sources[None],
                    spots[:, needed],
                    inside[:, None] + sources,
                    inside[:, None] + targets,
                )
            )

    def _targets(
        self,
        points: NDArray[np.intp],
        rows: NDArray[np.intp],
        columns: NDArray[np.intp],
        group: _Group,
        place: NDArray[np.intp],
    ) -> NDArray[np.intp]:
        """Grid index of each target of each lattice point, -1 outside; (targets, points)."""
        result = np.full((len(group.targets), len(points)), -1)
        for i, (tu, tv) in enumerate(group.targets):
            r, c = rows[points] + tu, columns[points] + tv
            good = (r < place.shape[0]) & (c < place.shape[1])
            result[i, good] = place[r[good], c[good]]
        return result

    def _inside(self, group: _Group, box: tuple[slice, slice]) -> NDArray[np.intp]:
        """Padded flat index of every kernel position that fits the calibration region."""
        both = np.concatenate([group.sources, group.targets])
        low, high = both.min(axis=0), both.max(axis=0)
        axes = [
            np.arange(b.start - lo, b.stop - hi) + p
            for b, lo, hi, p in zip(box, low, high, self.pad, strict=True)
        ]
        return (axes[0][:, None] * self.width + axes[1][None]).ravel()

    def complete(self, kspace: Array, damping: float) -> Array:
        """Centred (channel, u, v) k-space with the missing samples filled in."""
        channels, u, v = kspace.shape
        pu, pv = (int(p) for p in self.pad)
        padded = np.zeros((u + 2 * pu, self.width, channels), kspace.dtype)
        grid = padded[pu : pu + u, pv : pv + v]
        grid[...] = kspace.transpose(1, 2, 0)
        flat = padded.reshape(-1, channels)
        fits = [_fit(flat[s], flat[t], damping) for _, _, s, t in self.groups]
        grid[~self.lattice] = 0
        whole = np.zeros((u * v, channels), kspace.dtype)
        for (table, spots, _, _), weights in zip(self.groups, fits, strict=True):
            made = flat[table].reshape(len(table), -1) @ weights.astype(kspace.dtype)
            made = made.reshape(len(table), len(spots), channels)
            for i, spot in enumerate(spots):
                good = spot >= 0
                whole[spot[good]] = made[good, i]
        return whole.reshape(u, v, channels).transpose(2, 0, 1)


def _fit(x: Array, t: Array, damping: float) -> Array:
    """Regularised least squares of the module's objective, in double precision."""
    x = x.reshape(len(x), -1).astype(np.complex128)
    t = t.reshape(len(t), -1).astype(np.complex128)
    gram = x.conj().T @ x
    top = float(np.linalg.eigvalsh(gram)[-1])
    if top == 0:
        return np.zeros((x.shape[1], t.shape[1]), np.complex128)
    gram[np.diag_indices_from(gram)] += max(damping, 1e-15) * top
    return np.linalg.solve(gram, x.conj().T @ t)
