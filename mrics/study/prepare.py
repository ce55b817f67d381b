"""A scan made ready for its units: planes, body mask, noise, what was found about it."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import StudyError
from mrics.protocol import ScanFiles
from mrics.scan import Axes, Finding, Scan, body_mask, inspect_scan, read_scan, scan_sigma


@dataclass(frozen=True)
class PlaneChoice:
    """Which planes of a scan are studied: "all", a number spread evenly, or given indices."""

    spec: str | int | tuple[int, ...] = "all"

    def indices(self, body: NDArray[np.bool_]) -> tuple[int, ...]:
        """Plane indices for a body mask of shape (plane, u, v); only planes that hold body.

        A number is spread evenly over the planes whose body area is at least half the median.
        """
        area = body.sum(axis=(1, 2))
        count = len(area)
        if isinstance(self.spec, tuple):
            beyond = [i for i in self.spec if not 0 <= i < count]
            if beyond:
                raise StudyError(
                    f"Slice {beyond[0]} does not exist: the scan has {count} planes, 0 to "
                    f"{count - 1}.",
                    "study.slices",
                    "Name slices that the scan has.",
                )
            return tuple(sorted(self.spec))
        filled = np.flatnonzero(area > 0)
        if self.spec == "all" or int(self.spec) >= len(filled):
            return tuple(int(i) for i in filled)
        full = np.flatnonzero(area >= 0.5 * np.median(area[filled]))
        pool = full if len(full) >= int(self.spec) else filled
        at = (np.arange(int(self.spec)) + 0.5) * len(pool) / int(self.spec)
        return tuple(int(pool[int(i)]) for i in at)


@dataclass(frozen=True)
class Prepared:
    """One scan as the units take it.

    Attributes
    ----------
    scan : Scan
        As read.
    axes : Axes
        Which file axes are encoded.
    planes : tuple of int
        Studied plane indices (of one frame; every frame has the same).
    stack : ndarray of shape (frames * planes, u, v)
        The studied planes, frame by frame: the reference.
    body : ndarray of bool, shape of ``stack``
        Body mask, from the first frame.
    data_range : float
        Largest magnitude of the whole scan inside the body.
    sigma, snr : float
        Noise of the scan (SD of the real part) and mean magnitude in the body over it.
    nrmse_floor : float
        NRMSE that the reference's own noise alone makes against a noise-free image.
    findings : tuple of Finding
        What the scan shows of its history.
    sensitivities : ndarray of shape (planes, channel, u, v) or None
        Simulated receive sensitivities of the studied planes.
    covariance : ndarray of shape (channel, channel) or None
        Their noise covariance.
    """

    scan: Scan
    axes: Axes
    planes: tuple[int, ...]
    stack: NDArray[Any]
    body: NDArray[np.bool_]
    data_range: float
    sigma: float
    snr: float
    nrmse_floor: float
    findings: tuple[Finding, ...]
    sensitivities: NDArray[Any] | None = None
    covariance: NDArray[Any] | None = None

    @property
    def frame_planes(self) -> int:
        """Number of planes of one frame of the whole scan."""
        return self.scan.shape[self.axes.order[0]]

    def to_volume(self, stack: NDArray[Any]) -> NDArray[Any]:
        """A stack of the studied planes as a volume in file axes, zero elsewhere."""
        frames = self.scan.frames
        whole = np.zeros((frames, self.frame_planes, *stack.shape[1:]), dtype=stack.dtype)
        whole[:, list(self.planes)] = stack.reshape(frames, len(self.planes), *stack.shape[1:])
        shape = self.scan.shape[:4] if self.scan.data.ndim > 3 else self.scan.shape
        return self.axes.from_planes(whole.reshape(-1, *stack.shape[1:]), shape)


@lru_cache(maxsize=1)
def prepare(
    files: ScanFiles, axes: Axes, choice: PlaneChoice, channel_axis: int | None = None
) -> Prepared:
    """Read a scan and take from it what its units need; the last one is kept.

    Raises
    ------
    ScanError
        Where the scan cannot be read or used.
    StudyError
        Where no plane holds body, or a named slice does not exist.
    """
    scan = read_scan(
        files.path, phase=files.phase, imaginary=files.imaginary, channel_axis=channel_axis
    )
    volume = body_mask(scan.data)
    body_planes = axes.to_planes(volume)
    planes = choice.indices(body_planes)
    if not planes:
        raise StudyError(
            "No plane of the scan holds body.", files.path.name, "Check the scan and its axes."
        )
    per_frame = body_planes[list(planes)]
    body = np.ascontiguousarray(np.tile(per_frame, (scan.frames, 1, 1)))
    whole = axes.to_planes(scan.data)
    pick = [f * len(body_planes) + p for f in range(scan.frames) for p in planes]
    stack = np.ascontiguousarray(whole[pick])
    largest, total, energy = 0.0, 0.0, 0.0
    for index, plane in enumerate(whole):
        inside = np.abs(plane[body_planes[index % len(body_planes)]])
        if inside.size:
            largest = max(largest, float(inside.max()))
            total += float(inside.sum(dtype=np.float64))
            energy += float(np.square(inside, dtype=np.float64).sum())
    voxels = int(volume.sum()) * scan.frames
    sigma = float(scan_sigma(scan))
    return Prepared(
        scan=scan,
        axes=axes,
        planes=planes,
        stack=stack,
        body=body,
        data_range=largest,
        sigma=sigma,
        snr=total / voxels / sigma if sigma > 0 else float("inf"),
        nrmse_floor=sigma * (voxels / energy) ** 0.5 if energy > 0 else 0.0,
        findings=tuple(inspect_scan(scan, axes)),
    )
