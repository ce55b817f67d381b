"""From the continuous object to a scan at finite resolution, without inverse crime.

The object is evaluated on a grid finer than the acquired one, its k-space is computed there and
only the acquired part of it is kept, so the scan shows partial volume and Gibbs ringing as a
scanner's data do. Fat is displaced along the readout by its chemical shift; in the echo train each
phase line carries the T2 weighting of its echo; receive shading and a smooth phase multiply the
object, and white complex noise is added last.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.numerics import centred_fft, centred_ifft, map_blocks, stream
from mrics.phantom.knee import Knee
from mrics.phantom.shapes import ramp
from mrics.phantom.tissues import TISSUES, EchoTrain, Excitation

Array = NDArray[Any]

Sensitivity = Callable[[Array, Array, Array], Array]

FAT_SHIFT_HZ = 217.1  # 3.4 ppm at 1.5 T; common practice
_T2_CLASSES_MS = (12.0, 42.0, 700.0)  # ligament, muscle and cartilage, fluid; fat is its own
_OVERSCAN = 1.25  # readout oversampling: the leg goes on beyond the field of view
_BLOCK = 8


@dataclass(frozen=True)
class Geometry:
    """Acquired grid of one scan, in file axes (i, j, k).

    Attributes
    ----------
    matrix : tuple of 3 int
        Acquired voxels.
    voxel_mm : tuple of 3 float
        Voxel size; for slices the spacing.
    axes : str
        Knee axis along i, j, k: "zyx" (3-D, sagittal partitions) or "zxy" (coronal slices).
    offset_mm : tuple of 3 float
        Knee coordinate of voxel index N//2 along i, j, k.
    """

    matrix: tuple[int, int, int]
    voxel_mm: tuple[float, float, float]
    axes: str
    offset_mm: tuple[float, float, float] = (0.0, 0.0, 0.0)

    def coordinate(self, axis: int, factor: int = 1, overscan: float = 1.0) -> Array:
        """Positions in mm along file axis ``axis`` of a grid ``factor`` times finer."""
        count = round(self.matrix[axis] * overscan) * factor
        step = self.voxel_mm[axis] / factor
        return (np.arange(count) - count // 2) * step + self.offset_mm[axis]

    @property
    def affine(self) -> Array:
        """Voxel index to world mm (right, anterior, superior)."""
        affine = np.zeros((4, 4))
        affine[3, 3] = 1.0
        for axis, letter in enumerate(self.axes):
            row = "xyz".index(letter)
            affine[row, axis] = self.voxel_mm[axis]
            affine[row, 3] = self.offset_mm[axis] - self.voxel_mm[axis] * (self.matrix[axis] // 2)
        return affine


def _crop(kspace: Array, axis: int, count: int) -> Array:
    """Central ``count`` samples of centred k-space, scaled so that image values stay."""
    length = kspace.shape[axis]
    start = length // 2 - count // 2
    kept = np.take(kspace, np.arange(start, start + count), axis=axis)
    return kept * np.float32(np.sqrt(count / length))


def _shading(z: Array, y: Array, x: Array) -> Array:
    """Receive sensitivity of a knee coil's combined image: bright rim, falling off along z."""
    zz, yy, xx = z[:, None, None], y[None, :, None], x[None, None, :]
    rim = (xx / 60.0) ** 2 + ((yy + 6.0) / 68.0) ** 2
    tilt = 1.0 + 0.05 * xx / 60.0 - 0.07 * yy / 65.0
    along = np.exp(-(((zz - 3.0) / 88.0) ** 2))
    return ((0.80 + 0.42 * rim) * tilt * along).astype(np.float32)


def _phase(knee: Knee, name: str, strength: float, z: Array, y: Array, x: Array) -> Array:
    """Smooth background phase in radians: slow polynomials and a random part."""
    zz, yy, xx = z[:, None, None] / 60.0, y[None, :, None] / 60.0, x[None, None, :] / 60.0
    slow = 0.6 + 0.9 * zz - 0.7 * yy + 0.5 * xx + 0.5 * xx * yy - 0.6 * zz**2 + 0.4 * yy**2
    waves = knee.field(f"phase {name}", (38.0, 34.0, 34.0)).on(z, y, x)
    return (strength * (slow + 0.45 * waves)).astype(np.float32)


def _finish(kspace: Array, geometry: Geometry, shift_voxels: float, water: Array) -> Array:
    """Shift fat along the readout, add water, cut to the acquired readout and field of view."""
    length = kspace.shape[0]
    k = (np.arange(length) - length // 2) / length
    turn = np.exp(-2j * np.pi * k * shift_voxels).astype(np.complex64)
    whole = water + kspace * turn.reshape(-1, *[1] * (kspace.ndim - 1))
    image = centred_ifft(whole, axes=(0,))
    start = length // 2 - geometry.matrix[0] // 2
    return image[start : start + geometry.matrix[0]]


def gradient_echo_volume(
    knee: Knee,
    geometry: Geometry,
    sequence: Excitation,
    *,
    factor: tuple[int, int, int] = (2, 2, 4),
    bandwidth_hz: float = 260.0,
    sensitivity: Sensitivity | None = None,
) -> Array:
    """Noise-free 3-D gradient-echo scan of a knee.

    Parameters
    ----------
    knee : Knee
        The object.
    geometry : Geometry
        Acquired grid, ``axes`` "zyx": i readout, j phase, k partition.
    sequence : GradientEcho or like
        Contrast.
    factor : tuple of 3 int
        How much finer the object is sampled along i, j, k.
    bandwidth_hz : float
        Readout bandwidth per voxel; fat is displaced by ``FAT_SHIFT_HZ / bandwidth_hz`` voxels.
    sensitivity : callable or None
        Complex receive fields at three vectors of positions along i, j, k (mm from the voxel at
        index N//2, in the overscanned readout up to an eighth of the field of view past it), shape
        (channel, i, j, k); None for the shading of one combined image.

    Returns
    -------
    ndarray of complex64, shape ``geometry.matrix``
        With ``sensitivity`` (channel, *geometry.matrix).
    """
    palette = {name: (int(t.fat), sequence.signal(t)) for name, t in TISSUES.items()}
    z = geometry.coordinate(0, factor[0], _OVERSCAN)
    y, x = geometry.coordinate(1, factor[1]), geometry.coordinate(2, factor[2])
    turn = np.exp(-2j * np.pi * FAT_SHIFT_HZ * 1e-3 * sequence.echo_time_ms)
    shift = FAT_SHIFT_HZ / bandwidth_hz
    middle = geometry.offset_mm

    def block(rows: Array) -> Array:
        """Channels of one block, (channel, component, i, j, k), transformed along j and k."""
        signal = knee.signal(rows, y, x, palette)
        signal = signal * np.exp(1j * _phase(knee, "gre", 1.0, rows, y, x))
        if sensitivity is None:
            fields = _shading(rows, y, x)[None]
        else:
            fields = sensitivity(rows - middle[0], y - middle[1], x - middle[2])
        parts = []
        for one in fields:
            kspace = centred_fft((signal * one).astype(np.complex64), axes=(2, 3))
            parts.append(_crop(_crop(kspace, 2, geometry.matrix[1]), 3, geometry.matrix[2]))
        return np.stack(parts)

    parts = map_blocks(block, [z[n : n + _BLOCK] for n in range(0, len(z), _BLOCK)])
    whole = np.concatenate(parts, axis=2)
    images = []
    for channel in whole:
        kspace = _crop(centred_fft(channel, axes=(1,)), 1, len(z) // factor[0])
        hybrid = _finish(kspace[1] * np.complex64(turn), geometry, shift, kspace[0])
        images.append(centred_ifft(hybrid, axes=(1, 2)).astype(np.complex64))
    return images[0] if sensitivity is None else np.stack(images)


def echo_train_slices(
    knee: Knee,
    geometry: Geometry,
    sequence: EchoTrain,
    *,
    thickness_mm: float = 3.4,
    factor: int = 2,
    bandwidth_hz: float = 200.0,
) -> Array:
    """Noise-free 2-D multi-slice turbo-spin-echo scan of a knee.

    ``geometry.axes`` is "zxy": i readout, j phase, k slice. Each slice is the object averaged over
    a trapezoid profile of full width at half height ``thickness_mm``.

    Returns
    -------
    ndarray of complex64, shape ``geometry.matrix``
    """
    lines = geometry.matrix[1]
    times = sequence.echo_times_ms(lines)
    classes = (*_T2_CLASSES_MS, TISSUES["fat"].t2_ms)
    palette = {}
    for name, tissue in TISSUES.items():
        part = int(np.argmin(np.abs(np.log(np.asarray(_T2_CLASSES_MS) / tissue.t2_ms))))
        palette[name] = (len(classes) - 1 if tissue.fat else part, sequence.steady(tissue))
    z = geometry.coordinate(0, factor, _OVERSCAN)
    x = geometry.coordinate(1, factor)
    places = np.linspace(-0.6, 0.6, 7)
    profile = ramp(np.abs(places), 0.65, 0.35)
    profile = profile / profile.sum()
    decay = np.exp(-times[None, :] / np.asarray(classes)[:, None]).astype(np.float32)
    readout = len(z) // factor

    def one_slice(centre: float) -> Array:
        y = centre + places * thickness_mm
        signal = np.zeros((len(classes), len(z), len(x)), dtype=np.complex64)
        for n in range(0, len(z), 4 * _BLOCK):
            rows = z[n : n + 4 * _BLOCK]
            light = _shading(rows, y, x) * np.exp(1j * _phase(knee, "tse", 0.6, rows, y, x))
            thick = knee.signal(rows, y, x, palette) * light
            signal[:, n : n + 4 * _BLOCK] = np.einsum("czyx,y->czx", thick, profile)
        kspace = _crop(_crop(centred_fft(signal, axes=(1, 2)), 1, readout), 2, lines)
        kspace *= decay[:, None, :]
        shift = FAT_SHIFT_HZ / bandwidth_hz
        return _finish(kspace[-1], geometry, shift, kspace[:-1].sum(axis=0))

    slices = map_blocks(one_slice, [float(y) for y in geometry.coordinate(2)])
    return centred_ifft(np.stack(slices, axis=-1), axes=(1,)).astype(np.complex64)


def white_noise(shape: tuple[int, ...], sigma: float, seed: int, name: str) -> Array:
    """Complex white noise, standard deviation ``sigma`` in each of the two parts."""
    parts = stream(seed, "noise", name).standard_normal((2, *shape))
    return (sigma * (parts[0] + 1j * parts[1])).astype(np.complex64)
