"""Receive channels of a scan: simulated around one image, or its own with their noise."""

from __future__ import annotations

import warnings
from dataclasses import asdict, dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from mrics.encoding import Acquisition, compress, singular_values, undersample, with_sensitivities
from mrics.encoding.channels import silent_note
from mrics.encoding.coils import coils_for_scan
from mrics.encoding.noise import BORDER_SHARE, border_noise
from mrics.errors import MricsWarning
from mrics.protocol.sections import Coils as CoilSection
from mrics.recovery import recover
from mrics.sampling import Pattern
from mrics.scan import Scan

if TYPE_CHECKING:
    from mrics.study.prepare import Prepared

Array = NDArray[Any]
_CALIBRATION = 24
_CURVE_PLANES = 8


@dataclass(frozen=True)
class Receive:
    """What a report says of a scan's receive channels.

    Attributes
    ----------
    source : str
        "simulated" or "scan".
    channels : int
        Channels with signal.
    note : str
        Where the sensitivities come from.
    noise : str
        Where the noise covariance comes from.
    singular_values : tuple of float
        Of the whitened centre of full k-space, falling.
    curve_planes : int
        Planes they were taken over.
    virtual : int or None
        Virtual channels that every arm works with.
    plane : int
        Plane whose sensitivities are stored as a picture.
    """

    source: str
    channels: int
    note: str
    noise: str
    singular_values: tuple[float, ...]
    curve_planes: int
    virtual: int | None
    plane: int

    def as_dict(self) -> dict[str, Any]:
        """Plain values for a results file."""
        return asdict(self)


def with_simulated_channels(
    prepared: Prepared, coils: CoilSection, virtual: int | None
) -> Prepared:
    """The scan's planes as a simulated array sees them."""
    array = coils_for_scan(
        prepared.scan,
        prepared.axes,
        number=coils.number,
        rows=coils.rows,
        radius_mm=coils.radius_mm,
        standoff_mm=coils.standoff_mm,
        correlation=coils.correlation,
        form=coils.form,
    )
    maps = array.sensitivities[list(prepared.planes)]
    made = replace(prepared, sensitivities=maps, covariance=array.covariance)
    if coils.number == 1:
        return made
    chosen = _spread(len(prepared.planes), len(prepared.planes) if virtual else _CURVE_PLANES)
    full = undersample(
        prepared.stack[chosen],
        _whole(prepared),
        sensitivities=maps[chosen],
        covariance=made.covariance,
        sigma_scan=prepared.sigma,
    )
    noise = f"noise covariance of the simulated array, {coils.correlation:g} between neighbours"
    return _described(made, full, "simulated", array.note, noise, virtual)


def loud_channels(scan: Scan) -> Scan:
    """The scan without channels of zeros; a warning names them and ``remedies`` keeps it."""
    loud = np.array([scan.data[..., c].any() for c in range(scan.channels)])
    if scan.channels < 2 or loud.all() or not loud.any():
        return scan
    note = silent_note(loud)
    warnings.warn(f"{scan.name}: {note}", MricsWarning, stacklevel=2)
    return replace(scan, data=scan.data[..., loud], remedies=(*scan.remedies, note))


def with_own_channels(prepared: Prepared, virtual: int | None) -> Prepared:
    """The reference of a multi-channel scan: its channels combined by sensitivities of its own.

    The sensitivities come from the centre of the full scan, the combination is the one every
    multi-channel recovery makes, so that arms and reference differ by what was left out alone.
    """
    scan, sigma = prepared.scan, prepared.sigma
    note = "receive channels are those of the scan; sensitivities estimated from its centre"
    note = "; ".join((note, *scan.remedies))
    data = np.take(scan.data, prepared.planes, axis=prepared.axes.order[0])
    subset = replace(scan, data=data)
    full = undersample(subset, _whole(prepared), axes=prepared.axes, sigma_scan=sigma)
    covariance, noise = _border(prepared, scan, full)
    if covariance is not None:
        sigma = float(np.sqrt(np.trace(covariance).real / len(covariance)))
    full = with_sensitivities(replace(full, covariance=covariance, sigma_scan=sigma))
    image = recover(full, method="zero-filled").image
    light = np.abs(image[prepared.body])
    made = replace(
        prepared,
        stack=image,
        data_range=float(light.max()),
        sigma=sigma,
        snr=float(light.mean()) / sigma if sigma > 0 else float("inf"),
        nrmse_floor=sigma / float(np.sqrt((light.astype(np.float64) ** 2).mean())),
        sensitivities=full.sensitivities,
        covariance=covariance,
        channel_data=data,
    )
    return _described(made, full, "scan", note, noise, virtual)


def channel_picture(prepared: Prepared) -> Scan | None:
    """Sensitivities of the plane that pictures show, (i, j, k, channel) with one plane."""
    if prepared.receive is None or prepared.sensitivities is None:
        return None
    row = prepared.planes.index(prepared.receive.plane)
    plane, *_ = order = prepared.axes.order
    maps = np.asarray(prepared.sensitivities[row], np.complex64)
    volume = maps.transpose(1, 2, 0)[None].transpose(*(int(a) for a in np.argsort(order)), 3)
    affine = prepared.scan.affine.copy()
    affine[:3, 3] += affine[:3, plane] * prepared.receive.plane
    return Scan(np.ascontiguousarray(volume), affine, prepared.scan.voxel_mm)


def _described(
    prepared: Prepared, full: Acquisition, source: str, note: str, noise: str, virtual: int | None
) -> Prepared:
    """With what a report says, and the compression for arms that cannot calibrate their own."""
    matrices = None
    if virtual is not None:
        three_d = prepared.axes.partition is not None
        matrices = compress(full, virtual, per_plane=three_d).compression
        if matrices is not None and source == "simulated" and three_d:
            # One frame was taken for all.
            matrices = np.tile(matrices, (prepared.scan.frames, 1, 1))
    receive = Receive(
        source=source,
        channels=full.channels,
        note=note,
        noise=noise,
        singular_values=tuple(float(value) for value in singular_values(full)),
        curve_planes=full.shape[0],
        virtual=virtual,
        plane=prepared.planes[len(prepared.planes) // 2],
    )
    return replace(prepared, receive=receive, compression=matrices)


def _whole(prepared: Prepared) -> Pattern:
    """Full sampling of the prepared grid, with a calibration region."""
    grid = prepared.stack.shape[1:] if prepared.axes.partition else prepared.stack.shape[1:2]
    centre = tuple(min(_CALIBRATION, n) for n in grid)
    return Pattern(np.ones(grid, dtype=bool), calibration=centre)


def _spread(count: int, most: int) -> list[int]:
    """At most ``most`` of ``count`` planes, evenly."""
    few = min(count, most)
    return [int((k + 0.5) * count / few) for k in range(few)]


def _border(prepared: Prepared, scan: Scan, full: Acquisition) -> tuple[Array | None, str]:
    """Noise covariance from the readout's ends; in 3-D those are planes of the whole scan."""
    if prepared.axes.partition is None:
        return border_noise(full)
    length = prepared.frame_planes
    edge = max(1, round(BORDER_SHARE * length / 2))
    ends = [*range(edge), *range(length - edge, length)]
    data = np.take(scan.data, ends, axis=prepared.axes.order[0])
    outer = undersample(
        replace(scan, data=data), _whole(prepared), axes=prepared.axes, sigma_scan=0.0
    )
    return border_noise(outer, share=1.0)
