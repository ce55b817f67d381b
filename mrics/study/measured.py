"""Recover measured, undersampled k-space and write the image with its certificate."""

from __future__ import annotations

import time
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

import mrics
from mrics.caution import RESEARCH_ONLY
from mrics.encoding import acquisition_from_kspace
from mrics.errors import StudyError
from mrics.recovery import check_settings, recover
from mrics.sampling import read_pattern
from mrics.scan import Axes, Scan, read_scan, write_nifti
from mrics.study.files import write_json


def recover_measured(
    kspace: str | Path,
    pattern: str | Path,
    out: str | Path,
    *,
    method: str = "wavelet",
    settings: Mapping[str, Any] | None = None,
    noise: str | Path | None = None,
    channel_axis: int | None = None,
    axes: Axes | None = None,
    readout_transformed: bool = False,
    like: str | Path | None = None,
) -> dict[str, Any]:
    """Recover a measured acquisition from files.

    Parameters
    ----------
    kspace : str or Path
        Undersampled complex k-space, .npy (plane, u, v) or complex NIfTI, zero frequency at N//2.
    pattern : str or Path
        Sampling table or mask that was played out.
    out : str or Path
        Image to write, .nii or .nii.gz, complex64; the certificate is written beside it as .json.
    method, settings
        As :func:`mrics.recover` takes them.
    noise : str or Path, optional
        Noise samples, .npy (channel, ...).
    channel_axis : int, optional
        Axis of receive channels, counted from 0.
    axes : Axes, optional
        For NIfTI: which file axes are readout, phase and partition.
    readout_transformed : bool
        True where a 3-D acquisition's readout is in image space already.
    like : str or Path, optional
        NIfTI file of the same grid whose position the image takes; for .npy the image otherwise
        has unit voxels at the origin.

    Returns
    -------
    dict
        The certificate file's content.

    Raises
    ------
    MricsError
        Where files do not fit together; nothing is written then.
    """
    out = Path(out)
    started = time.perf_counter()
    if not out.name.endswith((".nii", ".nii.gz")):
        raise StudyError(
            f"The image's name {out.name!r} has another ending.",
            str(out),
            "Let it end in .nii or .nii.gz.",
        )
    check_settings(method, settings or {})
    played = read_pattern(pattern)
    source = Path(kspace)
    acquisition = acquisition_from_kspace(
        source,
        played,
        noise,
        channel_axis=channel_axis,
        axes=axes,
        readout_transformed=readout_transformed,
    )
    recovered = recover(acquisition, method=method, **(settings or {}))
    image = recovered.image.astype(np.complex64, copy=False)
    place = _place(source, like, channel_axis)
    if acquisition.axes is not None:
        image = acquisition.axes.from_planes(image, acquisition.volume_shape)
    elif place is not None and axes is not None:
        image = axes.from_planes(image, place.shape[:3])
    if place is None:
        place = Scan(image, np.eye(4), (1.0, 1.0, 1.0))
    out.parent.mkdir(parents=True, exist_ok=True)
    write_nifti(out, image, place)
    content = {
        "mrics": mrics.__version__,
        "caution": RESEARCH_ONLY,
        "pattern_hash": played.hash,
        "acceleration": played.acceleration,
        "channels": acquisition.channels,
        "notes": list(acquisition.notes),
        "sigma": acquisition.sigma,
        "certificate": recovered.certificate.as_dict(),
        "seconds": time.perf_counter() - started,
    }
    stem = out.name.removesuffix(".gz").removesuffix(".nii")
    write_json(out.with_name(f"{stem}.json"), content)
    return content


def _place(source: Path, like: str | Path | None, channel_axis: int | None) -> Scan | None:
    """What gives the image its position: the file named, or the k-space file itself."""
    if like is not None:
        return read_scan(like)
    if source.suffix == ".npy":
        return None
    return read_scan(source, channel_axis=channel_axis)
