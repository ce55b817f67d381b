"""What a pattern does to a point: spread in the image, side lobes, aliases, gaps."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import PatternError
from mrics.numerics import centred_ifft
from mrics.sampling.grid import Field
from mrics.sampling.pattern import Pattern
from mrics.sampling.regular import alias_positions

_BINS = 60


@dataclass(frozen=True)
class Spread:
    """Point spread of a pattern and what is read off it.

    Attributes
    ----------
    psf : ndarray of complex128
        Image of a point in the centre (index N//2), peak 1.
    law_psf : ndarray of complex128 or None
        Transform of the inclusion probabilities, peak 1: the lobe that the law itself makes.
    incoherent_peak : float or None
        max |psf - law_psf|, where the law's lobe has no part; None for regular patterns.
    side_lobe : float
        Largest local maximum of |psf| away from the centre.
    side_lobe_at : tuple of int
        Its place, in voxels from the point.
    off_peak : float
        Largest |psf| anywhere but the point itself: with a variable density the shoulder of the
        main lobe.
    rms : float
        Root mean square of |psf| away from the point. sqrt((N/M - 1)/(N - 1)) for every pattern of
        M of N positions, so it ranks nothing.
    histogram : tuple of ndarray
        Number of voxels by |psf| in decibels (counts, edges), the point itself left out.
    aliases : ndarray of float64, shape (R, axes), or None
        Regular lattices: places of the aliases in voxels, the point itself first.
    alias_distance : float or None
        Distance in voxels from the point to its nearest alias.
    largest_gap : float
        1-D: most successive lines left out between acquired ones. 2-D: diameter in positions of
        the largest empty circle inside the shutter.
    captured_energy : float or None
        Share of the training scans' k-space energy at acquired positions.
    """

    psf: NDArray[np.complex128]
    law_psf: NDArray[np.complex128] | None
    incoherent_peak: float | None
    side_lobe: float
    side_lobe_at: tuple[int, ...]
    off_peak: float
    rms: float
    histogram: tuple[NDArray[np.int64], Field] = field(repr=False)
    aliases: Field | None
    alias_distance: float | None
    largest_gap: float
    captured_energy: float | None

    def numbers(self) -> dict[str, Any]:
        """The single numbers, as plain values for results files."""
        return {
            "side_lobe": self.side_lobe,
            "side_lobe_at": list(self.side_lobe_at),
            "off_peak": self.off_peak,
            "rms": self.rms,
            "incoherent_peak": self.incoherent_peak,
            "alias_distance": self.alias_distance,
            "largest_gap": self.largest_gap,
            "captured_energy": self.captured_energy,
        }


def spread(pattern: Pattern, energy: Field | None = None, frame: int = 0) -> Spread:
    """Point spread of a pattern, of one frame where frames differ.

    Parameters
    ----------
    pattern : Pattern
        Any pattern.
    energy : ndarray of float64, optional
        Mean k-space energy of training scans (``training_energy``), for the captured share.
    frame : int
        Which frame.

    Raises
    ------
    PatternError
        For a frame without any acquired position.
    """
    mask = pattern.mask[frame] if pattern.frames else pattern.mask
    if not mask.any():
        raise PatternError(
            "The pattern acquires no position, so a point leaves nothing.",
            f"frame {frame}",
            "Draw with another seed, or use an exact-count draw.",
        )
    psf = point_spread(mask.astype(np.float64))
    law_psf = incoherent = None
    if pattern.probability is not None:
        p = pattern.probability[frame] if pattern.frames else pattern.probability
        law_psf = point_spread(p)
        incoherent = incoherent_peak(mask, p)
    size = np.abs(psf)
    centre = tuple(n // 2 for n in mask.shape)
    lobe, at = _side_lobe(size, centre)
    away = np.delete(size.ravel(), np.ravel_multi_index(centre, size.shape))
    counts, edges = np.histogram(20 * np.log10(np.maximum(away, 1e-5)), _BINS, (-100.0, 0.0))
    aliases = _aliases(pattern)
    return Spread(
        psf=psf,
        law_psf=law_psf,
        incoherent_peak=incoherent,
        side_lobe=lobe,
        side_lobe_at=at,
        off_peak=float(away.max()),
        rms=float(np.sqrt(np.mean(away**2))),
        histogram=(counts, edges),
        aliases=aliases,
        alias_distance=None if aliases is None else _nearest_alias(aliases),
        largest_gap=largest_gap(mask, pattern.shutter),
        captured_energy=None if energy is None else captured_energy(mask, energy),
    )


def point_spread(weights: Field) -> NDArray[np.complex128]:
    """Image of a central point under k-space weights, divided by their sum: 1 at N//2."""
    axes = tuple(range(-weights.ndim, 0))
    image = centred_ifft(weights.astype(np.complex128), axes)
    return np.asarray(image * (np.sqrt(weights.size) / weights.sum()))


def incoherent_peak(mask: NDArray[np.bool_], probability: Field) -> float:
    """Largest |PSF - transform of the inclusion probabilities| / sum p.

    The part of the point spread that the draw adds to the law: the law's own lobe is the same for
    every draw, and its shoulder hides the rest.
    """
    axes = tuple(range(-mask.ndim, 0))
    rest = centred_ifft((mask - probability).astype(np.complex128), axes)
    return float(np.abs(rest).max() * np.sqrt(mask.size) / probability.sum())


def captured_energy(mask: NDArray[np.bool_], energy: Field) -> float:
    """Share of the training energy at acquired positions."""
    return float(energy[mask].sum() / energy.sum())


def largest_gap(mask: NDArray[np.bool_], shutter: NDArray[np.bool_] | None = None) -> float:
    """Largest stretch of k-space left out (see :class:`Spread`)."""
    if mask.ndim == 1:
        lines = np.flatnonzero(mask)
        return float(np.diff(lines).max() - 1) if lines.size > 1 else 0.0
    from scipy.ndimage import distance_transform_edt

    distance = distance_transform_edt(~mask)
    if shutter is not None:
        distance = distance[shutter]
    return float(2 * distance.max())


def _side_lobe(size: Field, centre: tuple[int, ...]) -> tuple[float, tuple[int, ...]]:
    """Largest local maximum (periodic, all neighbours) other than the centre."""
    from scipy.ndimage import maximum_filter

    # equal neighbours of a plateau all count; rounding must not split them
    tops = size >= maximum_filter(size, size=3, mode="wrap") * (1 - 1e-12)
    tops[centre] = False
    if not tops.any():
        return 0.0, (0,) * size.ndim
    at = np.unravel_index(int(np.argmax(np.where(tops, size, -1.0))), size.shape)
    return float(size[at]), tuple(int(i - c) for i, c in zip(at, centre, strict=True))


def _aliases(pattern: Pattern) -> Field | None:
    settings = pattern.settings
    if settings.get("pattern") not in ("equispaced", "shifted lattice"):
        return None
    return alias_positions(pattern.grid, tuple(settings["steps"]), settings.get("shift", 0))


def _nearest_alias(aliases: Field) -> float | None:
    if len(aliases) < 2:
        return None
    return float(np.sqrt((aliases[1:] ** 2).sum(axis=1)).min())
