"""One unit of a study: one scan, one arm, one draw, from undersampling to numbers."""

from __future__ import annotations

import hashlib
import json
import time
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from threadpoolctl import threadpool_limits

from mrics.encoding import Acquisition, echo_weights, undersample
from mrics.encoding.sensitivities import KERNEL
from mrics.errors import StudyError
from mrics.protocol import Arm, Protocol, ScanFiles, play_pattern
from mrics.quality import error_maps, score_planes
from mrics.recovery import recover
from mrics.sampling import Pattern, draw_entry
from mrics.sampling.ordered import Ordered
from mrics.scan import Axes, Scan, write_nifti
from mrics.study.files import plain
from mrics.study.prepare import PlaneChoice, Prepared, prepare
from mrics.study.scratch import SCRATCH, read_scratch


@dataclass(frozen=True)
class Noise:
    """Noise added to every arm, as the protocol states it (at most one is given).

    Attributes
    ----------
    sigma, snr, percent : float or None
        Standard deviation of the real part; mean body magnitude over it; percent of the maximum.
    """

    sigma: float | None = None
    snr: float | None = None
    percent: float | None = None

    def added(self, scan: Prepared) -> float:
        """Sigma to add to this scan so that the total is what was asked (never below its own)."""
        if self.sigma is not None:
            return self.sigma
        if self.percent is not None:
            return self.percent / 100.0 * scan.data_range
        if self.snr is not None:
            total = scan.snr * scan.sigma / self.snr if scan.sigma > 0 else 0.0
            if scan.sigma == 0:
                total = float(np.abs(scan.stack[scan.body]).mean()) / self.snr
            return float(np.sqrt(max(0.0, total**2 - scan.sigma**2)))
        return 0.0


@dataclass(frozen=True)
class Unit:
    """What one unit computes; everything a worker process needs, nothing it can only guess.

    Attributes
    ----------
    key : str
        Content key: equal keys have equal results.
    scan_id : str
        Label of the scan in the results.
    files, axes, choice, channel_axis
        How the scan is read.
    protocol : Protocol
        The protocol: seed, sequence, decay.
    arm : Arm
        The arm.
    draw : int
        Number of the draw.
    noise : Noise
        Noise added.
    averages_ratio : float
        Averages of the reference over averages of the arm.
    folder : Path
        Study folder.
    keep_maps : bool
        Whether images are written too.
    sha256 : str
        Hash of the scan the study was started with.
    """

    key: str
    scan_id: str
    files: ScanFiles
    axes: Axes
    choice: PlaneChoice
    channel_axis: int | None
    protocol: Protocol
    arm: Arm
    draw: int
    noise: Noise
    averages_ratio: float
    folder: Path
    keep_maps: bool
    sha256: str

    @property
    def scratch(self) -> Path:
        """Where worker processes find the prepared scan."""
        return self.folder / SCRATCH / self.scan_id


def content_key(**parts: object) -> str:
    """Hash of everything a unit's numbers depend on."""
    text = json.dumps(plain(parts), sort_keys=True)
    return hashlib.sha256(text.encode()).hexdigest()[:24]


def draw_of(
    protocol: Protocol, arm: Arm, shape: tuple[int, ...], draw: int, frames: int = 0
) -> Ordered:
    """One draw of an arm, as the protocol's sequence plays it.

    Arms with the same sampling entry and acceleration share their draws, whatever their recovery,
    and so do all scans of one grid: arms are compared on the same patterns.
    """
    drawn = draw_entry(
        arm.sampling,
        shape,
        arm.acceleration,
        protocol.study.seed,
        frames=frames,
        identity=("draw", draw),
        axes=protocol.axes(),
    )
    return play_pattern(protocol, drawn)


def run_unit_here(unit: Unit) -> dict[str, Any]:
    """Compute a unit in the process that prepared the scan."""
    scan = prepare(
        unit.files,
        unit.axes,
        unit.choice,
        unit.channel_axis,
        unit.protocol.coils,
        unit.protocol.study.seed,
    )
    if scan.scan.sha256 != unit.sha256:
        raise StudyError(
            "The scan changed while the study ran.",
            unit.files.path.name,
            "Run the study again; units of scans that did not change are kept.",
        )
    return run_unit(unit, scan)


def run_unit_shared(unit: Unit) -> dict[str, Any]:
    """Compute a unit in a worker process, from the scratch files all workers share."""
    return run_unit(unit, read_scratch(unit.scratch))


def run_unit(unit: Unit, scan: Prepared) -> dict[str, Any]:
    """Compute a unit and write its maps; return the result, ready for the ledger.

    Linear algebra runs on one thread: planes are what is spread over threads and processes, and
    sums then have one order, so that a unit gives the same bits wherever it runs.
    """
    with threadpool_limits(1, user_api="blas"):
        return _computed(unit, scan)


def _computed(unit: Unit, scan: Prepared) -> dict[str, Any]:
    started = time.perf_counter()
    grid = pattern_grid(unit.axes, scan.scan.shape)
    frames = scan.scan.frames if scan.scan.frames > 1 else 0
    pattern = draw_of(unit.protocol, unit.arm, grid, unit.draw, frames).pattern
    # Fewer averages than the reference: its noise is raised by what the missing averages add.
    fewer = scan.sigma * float(np.sqrt(max(0.0, unit.averages_ratio - 1.0)))
    added = float(np.hypot(unit.noise.added(scan), fewer))
    acquisition = _acquire(unit, scan, pattern, added)
    recovered = recover(acquisition, method=unit.arm.recovery, **unit.arm.recovery_settings)
    image = recovered.image
    if scan.sensitivities is not None:
        # The phase of estimated sensitivities is free: magnitudes alone compare.
        image = np.abs(image)
    slices = score_planes(image, scan.stack, scan.body, scan.data_range)
    certificate = recovered.certificate.as_dict()
    wall_s = certificate.pop("wall_s")
    result: dict[str, Any] = {
        "key": unit.key,
        "arm": unit.arm.id,
        "scan": unit.scan_id,
        "draw": unit.draw,
        "seed": unit.protocol.study.seed,
        "sigma": acquisition.sigma,
        "sigma_added": added,
        "weight": certificate["weight"],
        "acceleration": pattern.acceleration,
        "acceleration_in_shutter": pattern.acceleration_in_shutter,
        "acquired": pattern.acquired,
        "pattern_hash": pattern.hash,
        "certificate": certificate,
        "slices": [
            {"index": index, "frame": frame, **values}
            for (frame, index), values in zip(_places(scan), slices, strict=True)
        ],
        "maps": _write_maps(unit, scan, image, pattern) if unit.keep_maps else [],
        "timing": {"recovery_s": wall_s, "unit_s": time.perf_counter() - started},
    }
    # The same digits whether a unit was computed now or read back.
    rounded: dict[str, Any] = plain(result)
    return rounded


def pattern_grid(axes: Axes, shape: tuple[int, ...]) -> tuple[int, ...]:
    """Shape of the phase-encode grid of a scan of ``shape``: (phase,) or (phase, partition)."""
    _, u, v = (shape[a] for a in axes.order)
    return (u, v) if axes.partition is not None else (u,)


def _noise_seed(unit: Unit, scan: Prepared) -> int:
    """The same noise for every arm of a scan and draw, so that arms compare in pairs."""
    identity = f"{unit.protocol.study.seed}\x1fnoise\x1f{scan.scan.sha256}\x1f{unit.draw}"
    return int.from_bytes(hashlib.sha256(identity.encode()).digest()[:8], "little")


def _acquire(unit: Unit, scan: Prepared, pattern: Pattern, added: float) -> Acquisition:
    """The scan undersampled; sensitivities are estimated from its calibration where it has one."""
    source: Any = scan.stack
    if scan.channel_data is not None:
        source = replace(scan.scan, data=scan.channel_data)
    acquisition = undersample(
        source,
        pattern,
        sigma=added,
        seed=_noise_seed(unit, scan),
        axes=unit.axes if scan.channel_data is not None else None,
        sensitivities=scan.sensitivities if scan.channel_data is None else None,
        covariance=scan.covariance,
        sigma_scan=scan.sigma,
        echo_weights=_decay(unit.protocol, pattern),
    )
    if scan.sensitivities is None:
        return acquisition
    # Known sensitivities would flatter an arm that has to estimate them from its own lines.
    least = 2 * KERNEL
    own = len(pattern.calibration) == len(pattern.grid) and min(pattern.calibration) >= least
    return replace(acquisition, sensitivities=None if own else scan.sensitivities)


def _decay(protocol: Protocol, pattern: Pattern) -> Any:
    """Signal weight of every position by its echo, where the protocol asks for it."""
    sequence = protocol.sequence
    if not protocol.study.echo_train_decay or sequence.echo_spacing_ms is None:
        return None
    return echo_weights(pattern, sequence.echo_spacing_ms, float(sequence.tissue_t2_ms or 0))


def _places(scan: Prepared) -> list[tuple[int, int]]:
    return [(frame, index) for frame in range(scan.scan.frames) for index in scan.planes]


def _write_maps(
    unit: Unit, scan: Prepared, image: Any, pattern: Pattern
) -> list[dict[str, str | int]]:
    folder = unit.folder / "arms" / unit.arm.id
    folder.mkdir(parents=True, exist_ok=True)
    signed, complex_error = error_maps(image, scan.stack)
    arrays: dict[str, Any] = {
        "recovered": image if np.iscomplexobj(scan.stack) else np.abs(image),
        "error": signed,
    }
    if complex_error is not None and np.iscomplexobj(scan.stack):
        arrays["error_complex"] = complex_error
    written: list[dict[str, str | int]] = []
    for kind, stack in arrays.items():
        path = folder / f"{unit.scan_id}_draw{unit.draw}_{kind}.nii.gz"
        dtype = np.complex64 if np.iscomplexobj(stack) else np.float32
        write_nifti(path, scan.to_volume(stack.astype(dtype, copy=False)), scan.scan)
        written.append(_entry(unit, kind, path))
    for kind, values in _grid_maps(pattern).items():
        path = folder / f"{unit.scan_id}_draw{unit.draw}_{kind}.nii.gz"
        if pattern.frames:
            values = np.moveaxis(values, 0, -1)
        shape = (*pattern.grid, *(1,) * (3 - len(pattern.grid)))
        volume = values.reshape(*shape, *values.shape[len(pattern.grid) :])
        # The phase-encode grid has no place in the patient: unit voxels at the origin.
        write_nifti(path, volume, Scan(volume, np.eye(4), (1.0, 1.0, 1.0)))
        written.append(_entry(unit, kind, path))
    return written


def _grid_maps(pattern: Pattern) -> dict[str, Any]:
    """The mask, and the echo (from 1) that acquires each position where a shot has several."""
    maps: dict[str, Any] = {"pattern": pattern.mask.astype(np.uint8)}
    if pattern.order is not None and pattern.order[:, 1].max(initial=0) > 0:
        maps["order"] = np.zeros(pattern.mask.shape, dtype=np.int16)
        maps["order"][pattern.mask] = pattern.order[:, 1] + 1
    return maps


def _entry(unit: Unit, kind: str, path: Path) -> dict[str, str | int]:
    return {
        "kind": kind,
        "scan": unit.scan_id,
        "arm": unit.arm.id,
        "draw": unit.draw,
        "file": path.relative_to(unit.folder).as_posix(),
    }
