"""Spread of one wavelet coefficient onto others, by scale.

A unit coefficient is turned into an image, its k-space is sampled, the rest set to zero, and the
zero-filled image is analysed again (the transform point spread of Lustig, Donoho, Pauly 2007, MRM
58:1182-1195). With a transform that concentrates the image, what the recovery must tell apart is
this interference, not the side lobes of a point.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
import pywt
from numpy.typing import NDArray

from mrics.errors import PatternError
from mrics.numerics import centred_fft, centred_ifft
from mrics.sampling.grid import Field

_MODE = "periodization"


@dataclass(frozen=True)
class TransformSpread:
    """Interference between wavelet scales.

    Attributes
    ----------
    peak : ndarray of float64, shape (scales, scales)
        ``peak[s, t]``: largest coefficient of scale t that a unit coefficient of scale s leaves,
        itself apart, divided by what is left of itself. The worst of a scale's orientations.
    kept : ndarray of float64, shape (scales,)
        What is left of the unit coefficient itself: the share of its k-space energy acquired.
    labels : tuple of str
        Scales from the finest detail (1) to the coarsest and the approximation.
    """

    peak: Field
    kept: Field
    labels: tuple[str, ...]

    @property
    def worst(self) -> float:
        """Largest interference of any detail scale onto any detail scale."""
        return float(self.peak[:-1, :-1].max())


def transform_spread(
    mask: NDArray[np.bool_], wavelet: str = "db4", levels: int | None = None
) -> TransformSpread:
    """Interference of a central coefficient of every scale onto all others.

    Parameters
    ----------
    mask : ndarray of bool, shape (n_u,) or (n_u, n_v)
        One frame's mask, zero frequency at N//2.
    wavelet : str
        Orthogonal wavelet.
    levels : int, optional
        Levels; by default as many as leave at least 16 samples, at most 4.

    Raises
    ------
    PatternError
        On grids shorter than the wavelet's filter at that level.

    Notes
    -----
    Sizes that are no multiple of 2^levels are padded, as in the wavelet recovery: the unknowns are
    coefficients of the padded plane.
    """
    if levels is None:
        levels = int(np.clip(np.log2(min(mask.shape) / 16), 1, 4))
    most = pywt.dwt_max_level(min(mask.shape), pywt.Wavelet(wavelet).dec_len)
    if levels > most:
        raise PatternError(
            f"A grid of {' x '.join(map(str, mask.shape))} is too small for {levels} levels of the "
            f"wavelet {wavelet}.",
            "transform point spread",
            "Use a larger grid, or rank draws by the point spread."
            if most < 1
            else f"Ask for at most {most} levels.",
        )
    atoms = _atoms(mask.shape, wavelet, levels)
    axes = tuple(range(mask.ndim))
    inside = tuple(slice(n) for n in mask.shape)
    peak = np.zeros((levels + 1, levels + 1))
    kept = np.full(levels + 1, np.inf)
    full = np.zeros(atoms.padded, dtype=np.complex128)
    for scale, place, spectrum in atoms.units:
        full[inside] = centred_ifft(spectrum * mask, axes)
        size = np.abs(_packed(full, wavelet, levels)[0])
        own = float(size[place])
        kept[scale] = min(kept[scale], own)
        size[place] = 0.0
        for target in range(levels + 1):
            parts = _parts(atoms.slices, levels, target)
            other = max(float(size[part].max()) for part in parts)
            peak[scale, target] = max(peak[scale, target], other / max(own, 1e-12))
    labels = (*(f"detail {s}" for s in range(1, levels + 1)), "approximation")
    return TransformSpread(peak, kept, labels)


@dataclass(frozen=True)
class _Atoms:
    """Spectra of one central unit coefficient per subband, with scale and place."""

    padded: tuple[int, ...]
    slices: list[Any]
    units: tuple[tuple[int, tuple[int, ...], NDArray[np.complex128]], ...]


@lru_cache(maxsize=2)
def _atoms(shape: tuple[int, ...], wavelet: str, levels: int) -> _Atoms:
    padded = tuple(-(-n // 2**levels) * 2**levels for n in shape)
    axes = tuple(range(len(shape)))
    template, slices = _packed(np.zeros(padded), wavelet, levels)
    units = []
    for scale, place in _central_coefficients(slices, levels):
        unit = np.zeros_like(template)
        unit[place] = 1.0
        atom = _synthesis(unit, slices, wavelet)[tuple(slice(n) for n in shape)]
        units.append((scale, place, centred_fft(atom, axes)))
    return _Atoms(padded, slices, tuple(units))


def _packed(image: NDArray[Any], wavelet: str, levels: int) -> tuple[NDArray[Any], list[Any]]:
    packed, slices = pywt.coeffs_to_array(pywt.wavedecn(image, wavelet, _MODE, levels))
    return packed, slices


def _parts(slices: list[Any], levels: int, scale: int) -> list[Any]:
    """Places of a scale's subbands in the packed array; scale 0 is the finest detail."""
    return [slices[0]] if scale == levels else list(slices[levels - scale].values())


def _central_coefficients(slices: list[Any], levels: int) -> Iterator[tuple[int, tuple[int, ...]]]:
    for scale in range(levels + 1):
        for part in _parts(slices, levels, scale):
            yield scale, tuple((s.start or 0) + ((s.stop - (s.start or 0)) // 2) for s in part)


def _synthesis(packed: Field, slices: list[Any], wavelet: str) -> Field:
    coefficients = pywt.array_to_coeffs(packed, slices, output_format="wavedecn")
    return np.asarray(pywt.waverecn(coefficients, wavelet, _MODE))
