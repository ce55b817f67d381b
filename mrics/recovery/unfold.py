"""Unfolding of regular patterns by sensitivities (SENSE), with its analytic noise gain.

A lattice of acceleration R folds R voxels p on one another. With E the channels x R matrix of their
whitened sensitivities and z the folded channel values,

    x = (E^H E)^-1 E^H R z,    g_p = sqrt([(E^H E)^-1]_pp [E^H E]_pp)

which is the least-squares image of the lattice samples; calibration samples off the lattice serve
the sensitivities alone. Where the lattice does not close on the grid (1-D, N not a multiple of R)
the same least-squares problem couples a whole column and is solved directly.

Source: Pruessmann et al. 1999, Magn Reson Med 42:952-962,
doi 10.1002/(SICI)1522-2594(199911)42:5<952::AID-MRM16>3.0.CO;2-S.
"""

from __future__ import annotations

import warnings
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import Encoding, blocks
from mrics.encoding.acquisition import Acquisition
from mrics.encoding.lattice import Lattice, find_lattice
from mrics.errors import AcquisitionError, MricsWarning, RecoveryError
from mrics.numerics import ifft_planes, map_blocks
from mrics.recovery.contract import Certificate, Recovered
from mrics.recovery.fields import Settings

Array = NDArray[Any]
#: condition number of E above which the certificate warns
CONDITION_WARNED = 1e4
_COLUMNS = 16


def solve(acquisition: Acquisition, settings: Settings, sigma: float) -> Recovered:
    """Least-squares image of the lattice samples; ``extras["noise_gain"]`` is the g map.

    The g map has the image's shape, float32, and is 0 where no channel sees the pixel.
    ``extras["noise_gain_acceleration"]`` is the lattice R that belongs to it.

    Raises
    ------
    RecoveryError
        Where the pattern is not regular, or more voxels fold together than there are channels.
    """
    try:
        lattice = find_lattice(acquisition)
    except AcquisitionError as error:
        raise RecoveryError(error.what, error.where, error.fix) from error
    u, v = acquisition.shape[1:]
    samples = np.roll(lattice.mask(u, v), (-(u // 2), -(v // 2)), axis=(0, 1))
    if lattice.closes(u, v):
        folds: _Folds | None = _Folds(samples)
    elif lattice.steps[1] == 1:
        folds = None
    else:
        raise RecoveryError(
            f"A lattice of steps {lattice.steps} and shift {lattice.shift} does not close on a "
            f"grid of {u} x {v}, so voxels do not fold on voxels.",
            "pattern",
            "Take a grid that the steps divide, or use least-squares.",
        )
    image = np.zeros(acquisition.shape, acquisition.kspace.dtype)
    gain = np.zeros(acquisition.shape, np.float32)
    worst = [1.0]
    for planes, encoding, data in blocks(acquisition):
        data *= samples

        def one(
            row: int, encoding: Encoding = encoding, data: Array = data, first: int = planes.start
        ) -> float:
            maps = _maps(encoding, row)
            if folds is None:
                result = _solve_columns(data[row], maps, samples[:, 0])
            else:
                result = folds.solve(data[row], maps, first + row)
            image[first + row], gain[first + row] = result[:2]
            return result[2]

        worst += map_blocks(one, range(encoding.in_shape[0]))
    note = _condition_note(max(worst))
    extras = {"noise_gain": gain, "noise_gain_acceleration": lattice.acceleration}
    return Recovered(image, Certificate("unfold", note=note), extras=extras)


def noise_gain(
    sensitivities: Array, lattice: Lattice, covariance: Array | None = None
) -> NDArray[np.float64]:
    """Analytic g map of a lattice.

    Parameters
    ----------
    sensitivities : ndarray of shape (plane, channel, u, v)
        Receive sensitivities, natural order.
    lattice : Lattice
        A lattice that closes on the grid.
    covariance : ndarray of shape (channel, channel), optional
        Psi; identity if left out.

    Returns
    -------
    ndarray of shape (plane, u, v)
        0 where no channel sees the pixel.
    """
    from mrics.encoding.channels import mix
    from mrics.encoding.noise import relative_covariance, whitening

    planes, channels, u, v = sensitivities.shape
    maps = np.asarray(sensitivities, np.complex128)
    if covariance is not None:
        maps = mix(whitening(relative_covariance(covariance, channels))[None], maps, slice(None))
    samples = np.roll(lattice.mask(u, v), (-(u // 2), -(v // 2)), axis=(0, 1))
    folds = _Folds(samples)
    nothing = np.zeros((channels, u, v), np.complex128)
    return np.array([folds.solve(nothing, maps[p], p)[1] for p in range(planes)])


def _maps(encoding: Encoding, row: int) -> Array:
    maps = encoding.sensitivities
    if maps is None:
        return np.ones(encoding.out_shape[1:], np.complex128)
    return maps[row if maps.shape[0] > 1 else 0].astype(np.complex128)


def _condition_note(worst: float) -> str:
    if worst <= CONDITION_WARNED:
        return ""
    note = f"unfolding is ill-conditioned: condition number up to {worst:.3g}"
    warnings.warn(note, MricsWarning, stacklevel=4)
    return note


class _Folds:
    """Which voxels fold on one another, for an un-centred lattice mask that closes on its grid."""

    def __init__(self, samples: NDArray[np.bool_]) -> None:
        u, v = samples.shape
        self.grid = (u, v)
        self.origin = tuple(int(i) for i in np.argwhere(samples)[0])
        moved = np.roll(samples, (-self.origin[0], -self.origin[1]), axis=(0, 1))
        spread = np.abs(ifft_planes(moved.astype(np.complex128)))
        aliases = np.argwhere(spread > 0.5 * spread[0, 0])
        rows, columns = np.indices(self.grid).reshape(2, -1)
        table = np.array([(rows + a) % u * v + (columns + b) % v for a, b in aliases])
        self.index = table[:, table.min(axis=0) == table[0]]
        n = np.arange(u)[:, None] * self.origin[0] / u
        m = np.arange(v)[None] * self.origin[1] / v
        self.phase = np.exp(2j * np.pi * (n + m)).ravel()

    def solve(self, kspace: Array, maps: Array, plane: int) -> tuple[Array, Array, float]:
        """Image, g map and largest condition number of one plane.

        Parameters
        ----------
        kspace : ndarray of shape (channel, u, v)
            Un-centred whitened lattice samples, zero elsewhere.
        maps : ndarray of shape (channel, u, v), complex128
            Whitened sensitivities.
        plane : int
            Its number, for messages.
        """
        channels, count = maps.shape[0], len(self.index)
        moved = np.roll(kspace, (-self.origin[0], -self.origin[1]), axis=(1, 2))
        folded = ifft_planes(moved.astype(np.complex128)).reshape(channels, -1)
        e = maps.reshape(channels, -1)[:, self.index]
        energy = (e.real**2 + e.imag**2).sum(axis=0)
        seen = energy > 0
        self._check_count(seen, channels, plane)
        gram = np.einsum("crn,csn->nrs", e.conj(), e)
        mean = energy.sum(axis=0) / np.maximum(seen.sum(axis=0), 1)
        fill = np.where(seen, 0.0, np.where(mean > 0, mean, 1.0))
        gram[:, np.arange(count), np.arange(count)] += fill.T
        values, vectors = np.linalg.eigh(gram)
        top = values[:, -1:]
        safe = np.maximum(values, 1e-14 * top)
        right = np.einsum("crn,cn->nr", e.conj(), count * folded[:, self.index[0]])
        turned = np.einsum("nri,nr->ni", vectors.conj(), right) / safe
        found = np.einsum("nri,ni->rn", vectors, turned)
        inverse = np.einsum("nri,ni->rn", vectors.real**2 + vectors.imag**2, 1 / safe)
        image = np.zeros(self.phase.size, np.complex128)
        gain = np.zeros(self.phase.size)
        image[self.index] = np.where(seen, found, 0)
        gain[self.index] = np.where(seen, np.sqrt(inverse * energy), 0.0)
        worst = float(np.sqrt((top[:, 0] / safe[:, 0]).max()))
        return (image * self.phase).reshape(self.grid), gain.reshape(self.grid), worst

    def _check_count(self, seen: NDArray[np.bool_], channels: int, plane: int) -> None:
        most = seen.sum(axis=0)
        if most.max() <= channels:
            return
        where = self.index[0, int(np.argmax(most))]
        raise RecoveryError(
            f"{int(most.max())} voxels inside the object fold together, more than the {channels} "
            f"channel{'s' if channels > 1 else ''}.",
            f"plane {plane}, voxel {tuple(int(i) for i in np.unravel_index(where, self.grid))}",
            "Lower the acceleration or use a regularised recovery.",
        )


def _solve_columns(
    kspace: Array, maps: Array, lines: NDArray[np.bool_]
) -> tuple[Array, Array, float]:
    """Image, g map and condition estimate where whole columns fold (see the module's text)."""
    channels, u, v = maps.shape
    # p(d) = 1/N sum over acquired lines of exp(2 pi i k d / N)
    spread = ifft_planes(lines.astype(np.complex128)[:, None], axes=(-2,))[:, 0] / np.sqrt(u)
    n = np.arange(u)
    coupling = spread[(n[:, None] - n[None]) % u]
    share = float(lines.mean())
    folded = ifft_planes(kspace.astype(np.complex128))
    right = (maps.conj() * folded).sum(axis=0)
    energy = (maps.real**2 + maps.imag**2).sum(axis=0)
    image = np.zeros((u, v), np.complex128)
    gain = np.zeros((u, v))
    worst = 1.0
    unknowns, equations = int((energy > 0).sum(axis=0).max()), channels * int(lines.sum())
    if unknowns > equations:
        raise RecoveryError(
            f"{unknowns} voxels of a column lie inside the object, more than its {equations} "
            f"equations ({int(lines.sum())} lines x {channels} channels).",
            "pattern, channels",
            "Lower the acceleration or use a regularised recovery.",
        )
    for start in range(0, v, _COLUMNS):
        part = slice(start, min(start + _COLUMNS, v))
        s = maps[:, :, part].transpose(2, 1, 0)
        gram = (s.conj() @ s.transpose(0, 2, 1)) * coupling
        e = energy[:, part].T
        unseen = np.where(e > 0, 0.0, share * max(float(energy.max()), 1e-300))
        gram[:, n, n] += unseen
        inverse = np.linalg.inv(gram)
        image[:, part] = (inverse @ right[:, part].T[:, :, None])[:, :, 0].T
        diagonal = np.abs(inverse[:, n, n]) * e * share
        gain[:, part] = np.sqrt(diagonal).T
        norms = np.linalg.norm(gram, 1, (1, 2)) * np.linalg.norm(inverse, 1, (1, 2))
        worst = max(worst, float(np.sqrt(norms.max())))
    image[energy == 0] = 0
    return image, gain, worst
