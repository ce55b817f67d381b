"""Sensitivities of an acquisition, estimated from its calibration region."""

from __future__ import annotations

import tempfile
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding.acquisition import Acquisition
from mrics.encoding.calibration import calibration_box, calibration_samples
from mrics.encoding.channels import channel_mixing, mix
from mrics.errors import AcquisitionError
from mrics.numerics import centred_fft, map_blocks

Array = NDArray[Any]
METHODS = ("adaptive", "espirit")
KERNEL = 6
_IN_MEMORY = 256 * 2**20


def estimate_sensitivities(
    acquisition: Acquisition,
    planes: slice | None = None,
    *,
    method: str = "espirit",
    sets: int = 1,
    kernel: int = KERNEL,
    support: float | None = None,
    whole_volume: bool = False,
) -> tuple[Array, Array]:
    """Sensitivities of unit norm over the whitened channels, plane by plane.

    Parameters
    ----------
    acquisition : Acquisition
        Multi-channel data with a fully sampled calibration region.
    planes : slice, optional
        Planes to do; all of them if left out.
    method : {"espirit", "adaptive"}
        Eigenvectors of the calibration data's local structure (Uecker 2014), or of the local
        covariance of the low-resolution image (Walsh 2000).
    sets : int
        Map sets (1 or 2; "espirit" only): two where the object is larger than the field of view.
    kernel : int
        Side of the "espirit" window in samples.
    support : float, optional
        Maps are zero where the eigenvalue is below this; default 0.9 for "espirit", whose
        eigenvalue is 1 where there is signal, and 0 (no cut) for "adaptive".
    whole_volume : bool
        Calibrate all planes of a frame at once on 3-D calibration data (``planes`` must be left
        out): the planes are transformed back along the readout and the window is a cube.

    Returns
    -------
    maps : ndarray of shape (planes, sets, channels, u, v)
        Whitened by the relative covariance and compressed like the data that ``blocks`` yields,
        the acquisition's dtype, natural order. Their phase is set by the leading channel
        combination of the calibration data.
    values : ndarray of shape (planes, sets, u, v), float32
        Eigenvalue ("espirit") or the share of energy it holds ("adaptive").

    Raises
    ------
    AcquisitionError
        For one channel, an undersampled calibration region or one too small for the kernel.
    """
    _check(acquisition, method, sets, kernel)
    if support is None:
        support = 0.9 if method == "espirit" else 0.0
    box = calibration_box(acquisition)
    grid = acquisition.shape[1:]
    chosen = range(*(planes or slice(None)).indices(acquisition.shape[0]))
    mixing = channel_mixing(acquisition)
    channels = acquisition.channels if mixing is None else mixing.shape[1]
    maps = np.zeros((len(chosen), sets, channels, *grid), acquisition.kspace.dtype)
    values = np.zeros((len(chosen), sets, *grid), np.float32)
    size = (kernel, kernel)

    def samples(part: slice) -> Array:
        raw = calibration_samples(acquisition, part, box=box, square=True)
        return mix(mixing, raw, part)

    from mrics.encoding.espirit import eigen_maps, window_correlations

    def store(row: int, found: Array, strength: Array) -> None:
        found[:] *= (strength > support)[:, None]
        maps[row], values[row] = found, strength

    def one_plane(row: int) -> None:
        plane = chosen[row]
        calibration = samples(slice(plane, plane + 1))[0]
        leading = _leading(calibration)
        if method == "adaptive":
            from mrics.encoding.adaptive import adaptive_maps

            store(row, *adaptive_maps(calibration, grid, leading))
        else:
            spread = window_correlations(calibration, size, acquisition.sigma)
            store(row, *eigen_maps(spread, grid, sets, leading))

    if not whole_volume:
        map_blocks(one_plane, range(len(chosen)))
        return maps, values
    if planes is not None or method != "espirit":
        raise AcquisitionError(
            "Calibration on the whole volume takes all planes and the method 'espirit'.",
            "planes, method",
            "Leave planes out, or calibrate plane by plane.",
        )
    frames = _frames(acquisition)
    count = len(chosen) // frames
    for frame in range(frames):
        calibration = samples(slice(frame * count, (frame + 1) * count)).transpose(1, 0, 2, 3)
        _volume(calibration, size, sets, acquisition.sigma, grid, frame * count, store)
    return maps, values


def with_sensitivities(
    acquisition: Acquisition, *, scratch: Path | str | None = None, **settings: Any
) -> Acquisition:
    """The acquisition with estimated sensitivities, so that several recoveries share them.

    Parameters
    ----------
    acquisition : Acquisition
        Multi-channel data; a compression is taken up again by ``blocks``.
    scratch : path, optional
        A .npy file to keep the maps in, memory-mapped, written plane by plane. If left out, in
        memory up to 256 MiB, beyond that in a temporary file that goes with the maps.
    **settings
        For :func:`estimate_sensitivities` (one map set).

    Returns
    -------
    Acquisition
        With ``sensitivities`` in the channels of ``kspace``, not whitened.
    """
    plain = replace(acquisition, compression=None)
    mixing = channel_mixing(plain)
    back = None if mixing is None else np.linalg.inv(mixing)
    shape = (acquisition.shape[0], acquisition.channels, *acquisition.shape[1:])
    if settings.get("whole_volume"):
        maps = mix(back, estimate_sensitivities(plain, **settings)[0][:, 0], slice(None))
    else:
        maps = _store(scratch, shape, acquisition.kspace.dtype)
        step = 16
        for start in range(0, shape[0], step):
            part = slice(start, min(start + step, shape[0]))
            found = estimate_sensitivities(plain, part, **settings)[0][:, 0]
            maps[part] = mix(back, found, part)
    method = settings.get("method", "espirit")
    note = f"sensitivities estimated from the calibration region ({method})"
    return replace(acquisition, sensitivities=maps, notes=(*acquisition.notes, note))


def _store(scratch: Path | str | None, shape: tuple[int, ...], dtype: Any) -> Array:
    if scratch is None and np.prod(shape) * np.dtype(dtype).itemsize <= _IN_MEMORY:
        return np.empty(shape, dtype)
    if scratch is None:
        with tempfile.TemporaryFile() as file:
            return np.memmap(file, dtype=dtype, mode="w+", shape=shape)
    return np.lib.format.open_memmap(scratch, mode="w+", dtype=dtype, shape=shape)


def _check(acquisition: Acquisition, method: str, sets: int, kernel: int) -> None:
    if acquisition.channels < 2:
        raise AcquisitionError(
            "The acquisition has one channel, so there are no sensitivities to estimate.",
            "channel axis",
            "Name the channel axis of multi-channel data.",
        )
    if method not in METHODS:
        raise AcquisitionError(
            f"There is no sensitivity estimation called {method!r}.",
            "method",
            f"Choose one of: {', '.join(METHODS)}.",
        )
    if sets not in (1, 2) or (sets == 2 and method == "adaptive"):
        raise AcquisitionError(
            f"{sets} map sets were asked of {method!r}.",
            "sets",
            "Take 1, or 2 with 'espirit'.",
        )
    if kernel < 2:
        raise AcquisitionError(
            f"A calibration kernel of {kernel} samples is too small.", "kernel", "Take 3 to 8."
        )


def _leading(calibration: Array) -> Array:
    """Strongest channel combination of calibration samples (channel, ...), phase fixed."""
    flat = calibration.reshape(calibration.shape[0], -1).astype(np.complex128)
    vector = np.linalg.eigh(flat @ flat.conj().T)[1][:, -1]
    largest = vector[np.argmax(np.abs(vector))]
    return vector * (np.conj(largest) / np.abs(largest))


def _frames(acquisition: Acquisition) -> int:
    return acquisition.volume_shape[3] if len(acquisition.volume_shape) == 4 else 1


def _volume(
    calibration: Array,
    size: tuple[int, int],
    sets: int,
    sigma: float,
    grid: tuple[int, int],
    first: int,
    store: Any,
) -> None:
    """Maps of all planes of one frame from (channel, plane, a, b) calibration samples."""
    from mrics.encoding.espirit import eigen_maps, waves, window_correlations

    count = calibration.shape[1]
    along = min(count, max(calibration.shape[2:]))
    k = min(size[0], along)
    centre = count // 2 - along // 2
    cube = centred_fft(calibration, axes=(1,))[:, centre : centre + along]
    spread = window_correlations(cube, (k, *size), sigma)
    leading = _leading(cube)

    def one(plane: int) -> None:
        wave = waves(count, k, np.array([plane]))[0]
        slab = np.tensordot(spread, wave, axes=([2], [0]))
        store(first + plane, *eigen_maps(slab, grid, sets, leading))

    map_blocks(one, range(count))
