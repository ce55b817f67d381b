"""What an error is made of: measured, missing and invented parts.

P x is the part of an image x that the acquisition determines. For one channel P is the projector on
the measured samples. For channels P = (E^H E + t)^-1 E^H E on the whitened encoding, with
t = (sigma / RMS signal)^2: "determined by the data at this noise". With e the error, the measured
part is P e and the unmeasured one e - P e, so that parts add up exactly; they are orthogonal for
one channel alone.

With a and b the unmeasured parts of the recovered image and of the reference, in each window of
8 x 8 coefficients of each band of an orthonormal wavelet transform, beta = <b, a> / <b, b> and

    missing  = (1 - beta) b      detail of the reference that the recovery left out (or overdid)
    invented = a - beta b        detail that has nothing of the reference in it

which are orthogonal within the window, and e = measured + invented - missing. Noise of the
reference in unmeasured samples counts as detail that is missing.

References
----------
The split by what the data determine follows Bhadra et al. 2021, IEEE Trans Med Imaging
40:3249-3260 (idea seen; pages from memory).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import Acquisition, Encoding, blocks
from mrics.numerics import fft_planes, ifft_planes, map_blocks
from mrics.quality._inputs import as_stack

Array = NDArray[Any]
WAVELET = "db4"
WINDOW = 8
_ITERATIONS = 200
_TOLERANCE = 1e-5


@dataclass(frozen=True)
class ErrorSplit:
    """The three parts of an error.

    Attributes
    ----------
    measured, missing, invented : ndarray of shape (plane, u, v), complex128
        Recovered less reference is ``measured + invented - missing``.
    shares : dict of str to ndarray of shape (plane,)
        Norm of each part over the norm of the reference, whole planes; NaN for an empty plane.
    totals : dict of str to float
        The same over all planes together.
    damping : float
        t of the projector on the data; 0 for one channel.
    orthogonal : bool
        True for one channel: squared norms of the parts add up to that of the error.
    """

    measured: Array
    missing: Array
    invented: Array
    shares: dict[str, Array]
    totals: dict[str, float]
    damping: float
    orthogonal: bool


def error_split(
    image: Array, reference: Array, acquisition: Acquisition, *, mask: Array | None = None
) -> ErrorSplit:
    """Split the error of a recovered image.

    Parameters
    ----------
    image, reference : ndarray of shape (plane, u, v), real or complex
        Recovered from ``acquisition``, and fully sampled.
    acquisition : Acquisition
        Whose pattern, sensitivities and noise say what was measured.
    mask : ndarray of bool, shape (plane, u, v), optional
        Where the RMS signal of t is taken; everywhere if left out.

    Raises
    ------
    QualityError
        For shapes that differ and values that are not finite.
    """
    stack, ref, inside = as_stack(image, reference, mask)
    one_channel = acquisition.sensitivities is None
    signal = np.abs(ref)[inside] if inside is not None else np.abs(ref)
    rms = float(np.sqrt(np.mean(signal.astype(np.float64) ** 2)))
    damping = 0.0 if one_channel else (acquisition.sigma / rms) ** 2 if rms > 0.0 else 0.0
    shape = stack.shape
    parts = {name: np.zeros(shape, dtype=np.complex128) for name in PARTS}
    for planes, encoding, _ in blocks(acquisition):

        def one(offset: int, encoding: Encoding = encoding, first: int = planes.start) -> None:
            at = first + offset
            own = encoding.part(slice(offset, offset + 1))
            x, y = stack[at].astype(np.complex128), ref[at].astype(np.complex128)
            known = [_determined(own, plane, damping) for plane in (x, y)]
            parts["measured"][at] = known[0] - known[1]
            missing, invented = _by_window(x - known[0], y - known[1])
            parts["missing"][at], parts["invented"][at] = missing, invented

        map_blocks(one, range(planes.stop - planes.start))
    norms = {name: np.linalg.norm(part, axis=(1, 2)) for name, part in parts.items()}
    size = np.linalg.norm(ref.astype(np.complex128), axis=(1, 2))
    whole = float(np.linalg.norm(size))
    with np.errstate(divide="ignore", invalid="ignore"):
        shares = {name: np.where(size > 0, norm / size, np.nan) for name, norm in norms.items()}
    return ErrorSplit(
        **parts,
        shares=shares,
        totals={
            name: float(np.linalg.norm(norm)) / whole if whole > 0.0 else float("nan")
            for name, norm in norms.items()
        },
        damping=damping,
        orthogonal=one_channel,
    )


PARTS = ("measured", "missing", "invented")


def _determined(encoding: Encoding, plane: Array, damping: float) -> Array:
    """P x of one plane, in double precision for one channel."""
    if encoding.sensitivities is None:
        weights = encoding.mask[0, 0]
        return ifft_planes(fft_planes(plane) * weights)
    x = plane[None].astype(encoding.dtype)
    return _damped_solve(encoding, encoding.normal(x), damping)[0].astype(np.complex128)


def _damped_solve(encoding: Encoding, right: Array, damping: float) -> Array:
    """(E^H E + t)^-1 right by conjugate gradients."""
    solution = np.zeros_like(right)
    residual = right.copy()
    direction = residual.copy()
    power = float(np.vdot(residual, residual).real)
    stop = _TOLERANCE**2 * power
    for _ in range(_ITERATIONS):
        if power <= stop:
            break
        applied = encoding.normal(direction) + damping * direction
        step = power / float(np.vdot(direction, applied).real)
        solution += step * direction
        residual -= step * applied
        before, power = power, float(np.vdot(residual, residual).real)
        direction = residual + (power / before) * direction
    return solution


def _by_window(a: Array, b: Array) -> tuple[Array, Array]:
    """Missing and invented parts of one plane."""
    import pywt

    levels = _levels(a.shape)
    # The coarsest level must be as long as the filter.
    least = pywt.Wavelet(WAVELET).dec_len - 1
    grid = tuple(max(-(-n // 2**levels), least) * 2**levels for n in a.shape)
    padded = [np.zeros(grid, dtype=np.complex128) for _ in range(2)]
    for plane, own in zip(padded, (a, b), strict=True):
        plane[: own.shape[0], : own.shape[1]] = own
    coefficients = [
        pywt.wavedec2(plane, WAVELET, mode="periodization", level=levels) for plane in padded
    ]
    missing: list[Any] = []
    invented: list[Any] = []
    for ours, theirs in zip(*coefficients, strict=True):
        if isinstance(ours, tuple):
            pairs = [_window_parts(one, other) for one, other in zip(ours, theirs, strict=True)]
            missing.append(tuple(pair[0] for pair in pairs))
            invented.append(tuple(pair[1] for pair in pairs))
        else:
            first, second = _window_parts(ours, theirs)
            missing.append(first)
            invented.append(second)
    crop = (slice(a.shape[0]), slice(a.shape[1]))
    back = [pywt.waverec2(one, WAVELET, mode="periodization")[crop] for one in (missing, invented)]
    return back[0], back[1]


def _levels(shape: tuple[int, ...]) -> int:
    """As many levels as leave at least one window, and no more than 4."""
    return int(np.clip(np.floor(np.log2(min(shape) / WINDOW)), 1, 4))


def _window_parts(a: Array, b: Array) -> tuple[Array, Array]:
    """(1 - beta) b and a - beta b in windows of 8 x 8 coefficients."""
    rows, columns = (-(-n // WINDOW) for n in a.shape)

    def tiles(band: Array) -> Array:
        full = np.zeros((rows * WINDOW, columns * WINDOW), dtype=band.dtype)
        full[: band.shape[0], : band.shape[1]] = band
        return full.reshape(rows, WINDOW, columns, WINDOW)

    ours, theirs = tiles(a), tiles(b)
    energy = (theirs.real**2 + theirs.imag**2).sum(axis=(1, 3), keepdims=True)
    product = (np.conj(theirs) * ours).sum(axis=(1, 3), keepdims=True)
    beta = np.divide(product, energy, out=np.zeros_like(product), where=energy > 0.0)
    beta = np.broadcast_to(beta, ours.shape).reshape(rows * WINDOW, columns * WINDOW)
    beta = beta[: a.shape[0], : a.shape[1]]
    return (1.0 - beta) * b, a - beta * b
