"""One unit of a study: one scan, one arm, one draw, from undersampling to numbers."""

from __future__ import annotations

import hashlib
import json
import time
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from mrics.encoding import Acquisition, compress, echo_weights, undersample
from mrics.encoding.sensitivities import KERNEL
from mrics.errors import StudyError
from mrics.numerics import one_blas_thread
from mrics.protocol import Arm, Protocol, ScanFiles, play_pattern
from mrics.quality import score_planes, taken_alone
from mrics.quality.measures import Measures
from mrics.quality.measuring import Measured, measure
from mrics.recovery import Recovered, frozen, recover
from mrics.sampling import Pattern, draw_entry
from mrics.sampling.ordered import Ordered
from mrics.scan import Axes
from mrics.study.files import plain
from mrics.study.maps import write_maps, write_sheets
from mrics.study.prepare import PlaneChoice, Prepared, prepare
from mrics.study.scratch import SCRATCH, read_scratch

#: calibration lines an arm needs along each axis to estimate its own sensitivities
LEAST_LINES = 2 * KERNEL


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
    pattern_of : str
        Label of the scan whose draws are played; this scan's own where empty.
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
    pattern_of: str = ""

    @property
    def scratch(self) -> Path:
        """Where worker processes find the prepared scan."""
        return self.folder / SCRATCH / self.scan_id


def content_key(**parts: object) -> str:
    """Hash of everything a unit's numbers depend on."""
    text = json.dumps(plain(parts), sort_keys=True)
    return hashlib.sha256(text.encode()).hexdigest()[:24]


def draw_of(
    protocol: Protocol, arm: Arm, scan_id: str, shape: tuple[int, ...], draw: int, frames: int = 0
) -> Ordered:
    """One draw of an arm for a scan, as the protocol's sequence plays it.

    Arms with the same sampling entry and acceleration share their draws, whatever their recovery,
    so that they are compared on the same patterns. Every scan has draws of its own, by its label:
    the luck of one draw then reaches one scan, and scan means are independent. The label and not
    the content, so that a remedied scan has the patterns of the scan it came from.
    """
    drawn = draw_entry(
        arm.sampling,
        shape,
        arm.acceleration,
        protocol.study.seed,
        frames=frames,
        identity=("draw", scan_id, draw),
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
        unit.protocol.study.virtual_channels,
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
    if scan.scan.sha256 != unit.sha256:
        raise StudyError(
            "The scan changed while the study ran.",
            unit.files.path.name,
            "Run the study again; units of scans that did not change are kept.",
        )
    with one_blas_thread():
        return _computed(unit, scan)


def acquire(unit: Unit, scan: Prepared) -> tuple[Pattern, Acquisition]:
    """The pattern a unit plays and what it acquires of its scan."""
    grid = pattern_grid(unit.axes, scan.scan.shape)
    frames = scan.scan.frames if scan.scan.frames > 1 else 0
    pattern = draw_of(
        unit.protocol, unit.arm, unit.pattern_of or unit.scan_id, grid, unit.draw, frames
    ).pattern
    # Fewer averages than the reference: its noise is raised by what the missing averages add.
    fewer = scan.sigma * float(np.sqrt(max(0.0, unit.averages_ratio - 1.0)))
    added = float(np.hypot(unit.noise.added(scan), fewer))
    return pattern, _acquire(unit, scan, pattern, added)


def _computed(unit: Unit, scan: Prepared) -> dict[str, Any]:
    started = time.perf_counter()
    pattern, acquisition = acquire(unit, scan)
    method, settings = unit.arm.recovery, unit.arm.recovery_settings
    recovered = recover(acquisition, method, reference=scan.stack, mask=scan.body, **settings)
    image = recovered.image
    if scan.sensitivities is not None:
        # The phase of estimated sensitivities is free: magnitudes alone compare.
        image = np.abs(image)
    compared = (image, scan.stack, scan.body, scan.data_range)
    slices = [
        {**one, **more}
        for one, more in zip(score_planes(*compared), taken_alone(*compared), strict=True)
    ]
    measured = _measure(unit, scan, acquisition, recovered)
    if measured is not None:
        slices = [{**one, **more} for one, more in zip(slices, measured.by_plane, strict=True)]
    certificate = recovered.certificate.as_dict()
    wall_s = certificate.pop("wall_s")
    if unit.arm.weight_rule:
        certificate["weight_rule"] = unit.arm.weight_rule
    result: dict[str, Any] = {
        "key": unit.key,
        "arm": unit.arm.id,
        "scan": unit.scan_id,
        "draw": unit.draw,
        "seed": unit.protocol.study.seed,
        "sigma": acquisition.sigma,
        "sigma_added": acquisition.sigma_added,
        "weight": certificate["weight"],
        "acceleration": pattern.acceleration,
        "acceleration_in_shutter": pattern.acceleration_in_shutter,
        "acquired": pattern.acquired,
        "pattern_hash": pattern.hash,
        "certificate": certificate,
        "acquisition": list(acquisition.notes),
        "noise_gain": _analytic_gain(recovered.extras, scan),
        "slices": [
            {"index": index, "frame": frame, **values}
            for (frame, index), values in zip(_places(scan), slices, strict=True)
        ],
        "measures": None if measured is None else measured.tables,
        "maps": [],
        "timing": {"recovery_s": wall_s},
    }
    if unit.keep_maps:
        further = {
            name: values
            for name, values in recovered.extras.items()
            if isinstance(values, np.ndarray) and values.shape == scan.stack.shape
        }
        further |= {} if measured is None else measured.maps
        label = (unit.arm.id, unit.scan_id, unit.draw)
        result["maps"] = write_maps(unit.folder, label, scan, image, pattern, further)
        result["maps"] += write_sheets(unit.folder, label, recovered.extras.get("sheets", {}))
    if measured is not None:
        result["timing"]["measures_s"] = measured.seconds
    result["timing"]["unit_s"] = time.perf_counter() - started
    # The same digits whether a unit was computed now or read back.
    rounded: dict[str, Any] = plain(result)
    return rounded


def _analytic_gain(extras: dict[str, Any], scan: Prepared) -> dict[str, Any] | None:
    """Percentiles inside the body of the noise gain that a recovery knows of itself."""
    gain = extras.get("noise_gain")
    if gain is None:
        return None
    seen = gain[scan.body & (gain > 0)]
    if not seen.size:
        return None
    shares = (5, 25, 50, 75, 95, 99)
    found = np.percentile(seen, shares)
    return {
        "acceleration": extras["noise_gain_acceleration"],
        "percentiles": {str(s): float(v) for s, v in zip(shares, found, strict=True)},
        "largest": float(seen.max()),
    }


def _measure(
    unit: Unit, scan: Prepared, acquisition: Acquisition, recovered: Recovered
) -> Measured | None:
    """The further measures the protocol asks for; those that recover again on the first draw.

    A pattern given by its scan (an exported table) is measured in full, whatever its number.
    """
    image = recovered.image
    wanted = unit.protocol.measures()
    if wanted is None:
        return None
    if unit.draw > 0 and not unit.pattern_of:
        wanted = replace(
            wanted, noise_replicas=0, resolution_runs=0, features=(), observer_images=0
        )
    if scan.sensitivities is not None:
        # The parts of the error refer to one phase, which estimated sensitivities leave free.
        wanted = replace(wanted, error_split=False)
    mm = scan.scan.voxel_mm
    plane, u, v = (mm[axis] for axis in unit.axes.order)
    return measure(
        acquisition,
        image if scan.sensitivities is None else np.abs(image),
        scan.stack,
        (plane, u, v),
        method=unit.arm.recovery,
        settings=frozen(unit.arm.recovery, unit.arm.recovery_settings, recovered.certificate),
        measures=wanted,
        mask=scan.body,
        data_range=scan.data_range,
        labels=scan.labels,
        edges=_given_edges(unit, scan, wanted),
        seed=unit.protocol.study.seed,
    )


def _given_edges(unit: Unit, scan: Prepared, wanted: Measures) -> Any:
    """Edges that the protocol names in this scan, as (plane of the stack, u, v, angle)."""
    if isinstance(wanted.edges, bool):
        return None
    rows = []
    for edge in wanted.edges:
        at = [(edge.i, edge.j, edge.k)[axis] for axis in unit.axes.order]
        plane = round(at[0])
        if edge.scan in ("", unit.scan_id) and plane in scan.planes:
            first = scan.planes.index(plane)
            count = len(scan.planes)
            rows += [
                (frame * count + first, at[1], at[2], edge.angle_deg)
                for frame in range(scan.scan.frames)
            ]
    return np.array(rows, dtype=np.float64).reshape(-1, 4)


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
    own = len(pattern.calibration) == len(pattern.grid)
    own = own and min(pattern.calibration) >= LEAST_LINES
    if not own:
        notes = (*acquisition.notes, "sensitivities of the full scan")
        return replace(
            acquisition,
            sensitivities=scan.sensitivities,
            compression=scan.compression,
            notes=notes,
        )
    notes = (*acquisition.notes, "sensitivities estimated from the arm's own calibration region")
    acquisition = replace(acquisition, sensitivities=None, notes=notes)
    virtual = unit.protocol.study.virtual_channels
    if virtual is None or virtual >= acquisition.channels:
        return acquisition
    return compress(acquisition, virtual, per_plane=unit.axes.partition is not None)


def _decay(protocol: Protocol, pattern: Pattern) -> Any:
    """Signal weight of every position by its echo, where the protocol asks for it."""
    sequence = protocol.sequence
    if not protocol.study.echo_train_decay or sequence.echo_spacing_ms is None:
        return None
    return echo_weights(pattern, sequence.echo_spacing_ms, float(sequence.tissue_t2_ms or 0))


def _places(scan: Prepared) -> list[tuple[int, int]]:
    return [(frame, index) for frame in range(scan.scan.frames) for index in scan.planes]
