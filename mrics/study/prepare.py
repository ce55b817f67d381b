"""A scan made ready for its units: planes, body mask, noise, what was found about it."""

from __future__ import annotations

import logging
from collections import OrderedDict
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import root_sum_of_squares
from mrics.errors import StudyError
from mrics.protocol import ScanFiles
from mrics.protocol.sections import Coils as CoilSection
from mrics.scan import (
    Axes,
    Finding,
    Scan,
    body_mask,
    inspect_fully,
    read_labels,
    read_scan,
)
from mrics.scan.remedies import add_phase
from mrics.study.channels import Receive, loud_channels, with_own_channels, with_simulated_channels

_log = logging.getLogger(__name__)


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
        Receive sensitivities of the studied planes: simulated ones, or for a multi-channel scan
        those estimated from the full scan. None for one channel.
    covariance : ndarray of shape (channel, channel) or None
        Noise covariance: of simulated channels, or of a multi-channel scan's border; None for one
        channel and where it is not known.
    channel_data : ndarray or None
        The studied planes of a multi-channel scan, in file axes.
    compression : ndarray or None
        Virtual channels from the full scan, for arms without calibration lines of their own.
    receive : Receive or None
        What is known of the channels, for the report; None for one channel.
    labels : ndarray of int, shape of ``stack``, or None
        Label map of the scan.
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
    channel_data: NDArray[Any] | None = None
    compression: NDArray[Any] | None = None
    receive: Receive | None = None
    labels: NDArray[np.int32] | None = None

    @property
    def frame_planes(self) -> int:
        """Number of planes of one frame of the whole scan."""
        return self.scan.shape[self.axes.order[0]]

    def to_volume(self, stack: NDArray[Any]) -> NDArray[Any]:
        """A stack of the studied planes as a volume in file axes, zero elsewhere."""
        frames = self.scan.frames
        whole = np.zeros((frames, self.frame_planes, *stack.shape[1:]), dtype=stack.dtype)
        whole[:, list(self.planes)] = stack.reshape(frames, len(self.planes), *stack.shape[1:])
        shape = self.scan.shape[:4] if frames > 1 else self.scan.shape[:3]
        return self.axes.from_planes(whole.reshape(-1, *stack.shape[1:]), shape)


# Prepared scans of this process, most recently used last; small ones are kept side by side.
_kept: OrderedDict[tuple[object, ...], Prepared] = OrderedDict()
_KEPT_BYTES = 256 * 2**20


def prepare(
    files: ScanFiles,
    axes: Axes,
    choice: PlaneChoice,
    channel_axis: int | None = None,
    coils: CoilSection | None = None,
    seed: int = 0,
    virtual_channels: int | None = None,
) -> Prepared:
    """Read a scan and take from it what its units need; kept until others need the room.

    A file that changed since is read again. ``coils`` puts a simulated receive array (and, on
    magnitude scans, a smooth phase of that seed) on a scan of one channel; ``virtual_channels``
    compresses the channels there are.

    Raises
    ------
    ScanError
        Where the scan cannot be read or used.
    StudyError
        Where no plane holds body, or a named slice does not exist.
    """
    key = (files, axes, choice, channel_axis, coils, seed, virtual_channels, _signature(files))
    if key in _kept:
        _kept.move_to_end(key)
        return _kept[key]
    prepared = _prepare(files, axes, choice, channel_axis, coils, seed, virtual_channels)
    _kept[key] = prepared
    while len(_kept) > 1 and sum(_size(one) for one in _kept.values()) > _KEPT_BYTES:
        _kept.popitem(last=False)
    return prepared


def _signature(files: ScanFiles) -> tuple[object, ...]:
    """Size and time of change of the files; a missing one is told apart when it is read."""
    found: list[object] = []
    for path in (files.path, files.phase, files.imaginary, files.labels):
        if path is not None and path.exists():
            state = path.stat()
            found += [state.st_size, state.st_mtime_ns]
        else:
            found.append(None)
    return tuple(found)


def _size(prepared: Prepared) -> int:
    arrays = (prepared.scan.data, prepared.stack, prepared.body, prepared.sensitivities)
    return sum(array.nbytes for array in arrays if array is not None)


def _prepare(
    files: ScanFiles,
    axes: Axes,
    choice: PlaneChoice,
    channel_axis: int | None,
    coils: CoilSection | None,
    seed: int,
    virtual_channels: int | None,
) -> Prepared:
    scan = read_scan(
        files.path, phase=files.phase, imaginary=files.imaginary, channel_axis=channel_axis
    )
    if scan.data.ndim > 4:
        scan = loud_channels(scan)
    inspection = inspect_fully(scan, axes)
    sigma = inspection.noise.sigma
    if coils is not None and coils.phase > 0 and scan.magnitude_only:
        scan = add_phase(scan, strength_rad=coils.phase, seed=seed)
    combined = scan.data if scan.channels == 1 else root_sum_of_squares(scan.data, axis=4)
    if combined.ndim == 4 and scan.frames == 1:
        combined = combined[..., 0]
    volume = body_mask(combined)
    body_planes = axes.to_planes(volume)
    labels = None if files.labels is None else axes.to_planes(read_labels(files.labels, scan))
    eligible = body_planes
    if labels is not None and isinstance(choice.spec, int):
        # Few planes: those that the regions lie in.
        eligible = body_planes & np.asarray(labels.any(axis=(1, 2)))[:, None, None]
    planes = choice.indices(eligible)
    if not planes:
        raise StudyError(
            f"No plane of the scan holds body{'' if labels is None else ' and a label'}.",
            files.path.name,
            "Check the scan and its axes.",
        )
    if labels is not None and not labels[list(planes)].any():
        raise StudyError(
            f"The label map holds no region in the studied slices {list(planes)}.",
            f"{files.labels}, study.slices",
            "Study slices that hold regions.",
        )
    per_frame = body_planes[list(planes)]
    whole = axes.to_planes(combined)
    pick = [f * len(body_planes) + p for f in range(scan.frames) for p in planes]
    light = _light(whole, body_planes)
    voxels = int(volume.sum()) * scan.frames
    prepared = Prepared(
        scan=scan,
        axes=axes,
        planes=planes,
        stack=np.ascontiguousarray(whole[pick]),
        body=np.ascontiguousarray(np.tile(per_frame, (scan.frames, 1, 1))),
        data_range=light.largest,
        sigma=sigma,
        snr=light.total / voxels / sigma if sigma > 0 else float("inf"),
        nrmse_floor=sigma * (voxels / light.energy) ** 0.5 if light.energy > 0 else 0.0,
        findings=inspection.findings,
        labels=None
        if labels is None
        else np.ascontiguousarray(np.tile(labels[list(planes)], (scan.frames, 1, 1))),
    )
    _log.info(
        "read %s: %s, %s, sigma %.4g, SNR %.3g, %d planes, %d findings",
        *(files.name, " x ".join(map(str, scan.shape)), scan.complex_source),
        *(prepared.sigma, prepared.snr, len(planes), len(prepared.findings)),
    )
    if scan.channels > 1:
        return with_own_channels(prepared, virtual_channels)
    if coils is not None:
        return with_simulated_channels(prepared, coils, virtual_channels)
    return prepared


class _Light(NamedTuple):
    """Magnitude inside the body: largest, sum, sum of squares."""

    largest: float
    total: float
    energy: float


def _light(whole: NDArray[Any], body: NDArray[np.bool_]) -> _Light:
    largest, total, energy = 0.0, 0.0, 0.0
    for index, plane in enumerate(whole):
        inside = np.abs(plane[body[index % len(body)]])
        if inside.size:
            largest = max(largest, float(inside.max()))
            total += float(inside.sum(dtype=np.float64))
            energy += float(np.square(inside, dtype=np.float64).sum())
    return _Light(largest, total, energy)
