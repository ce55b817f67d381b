"""A smooth random phase for scans that hold magnitude only.

A magnitude image has Hermitian k-space: any half of it tells the rest, which no scanner grants.
A smooth phase takes that away.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from mrics.errors import AcquisitionError
from mrics.phantom.fields import RandomField
from mrics.scan.volume import Scan

_ACROSS = 2.5  # lattice steps across the field of view: about one wave
SOURCE = "magnitude, simulated phase"


def smooth_phase(
    shape: Sequence[int], voxel_mm: Sequence[float], strength: float, seed: int = 0
) -> NDArray[np.float32]:
    """A smooth random phase over a volume.

    Parameters
    ----------
    shape : sequence of 3 int
        Voxels.
    voxel_mm : sequence of 3 float
        Voxel size; the phase varies over about a third of the field of view along each axis.
    strength : float
        Standard deviation over the volume in radians, from 0 up; the mean is 0.
    seed : int
        Seed; the same on any machine to rounding.

    Returns
    -------
    ndarray of float32, shape ``shape``
        Radians, not wrapped.

    Raises
    ------
    AcquisitionError
        Where ``strength`` is not a number from 0 up.
    """
    if not np.isfinite(strength) or strength < 0:
        raise AcquisitionError(
            f"A phase strength of {strength} is not a number from 0 up.",
            "coils, phase",
            "Give the standard deviation of the phase in radians, for example 0.8.",
        )
    grid = [
        (np.arange(count) - count // 2) * step for count, step in zip(shape, voxel_mm, strict=True)
    ]
    reach = [count * step / 2.0 + step for count, step in zip(shape, voxel_mm, strict=True)]
    spacing = [max(2.0 * half / _ACROSS, step) for half, step in zip(reach, voxel_mm, strict=True)]
    waves = RandomField(seed, "phase of a magnitude scan", spacing, reach).on(*grid)
    waves = waves - waves.mean(dtype=np.float64)
    spread = float(waves.std(dtype=np.float64))
    # One voxel has no spread to scale: its phase is 0, like any volume's mean.
    phase: NDArray[np.float32] = (waves * (strength / max(spread, 1e-12))).astype(np.float32)
    return phase


def with_phase(scan: Scan, strength: float, seed: int = 0) -> Scan:
    """A magnitude scan with :func:`smooth_phase` put on it, the same for all frames.

    Returns
    -------
    Scan
        complex64; ``complex_source`` says that the phase is simulated. ``strength`` 0 gives the
        scan unchanged.

    Raises
    ------
    AcquisitionError
        Where the scan has a phase of its own.
    """
    if not scan.magnitude_only:
        raise AcquisitionError(
            f"Scan {scan.name} has a phase of its own ({scan.complex_source}).",
            "coils, phase",
            "Leave the simulated phase out.",
        )
    phase = smooth_phase(scan.shape[:3], scan.voxel_mm, strength, seed)
    if strength == 0:
        return scan
    turn = np.exp(1j * phase).astype(np.complex64)
    data = scan.data * turn.reshape(*turn.shape, *[1] * (scan.data.ndim - 3))
    return replace(scan, data=data, complex_source=SOURCE)
