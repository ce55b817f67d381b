"""The sample data: three invented subjects, scanned by two invented knee sequences.

Run ``python -m mrics.phantom OUT_DIR`` to make the files again.
"""

from __future__ import annotations

import gzip
import hashlib
import json
import os
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.caution import NIFTI_DESCRIP, RESEARCH_ONLY
from mrics.errors import MricsError
from mrics.numerics import centred_fft, stream
from mrics.phantom.knee import Feature, Knee
from mrics.phantom.record import (
    Geometry,
    Sensitivity,
    echo_train_slices,
    gradient_echo_volume,
    white_noise,
)
from mrics.phantom.tissues import EchoTrain, GradientEcho

Array = NDArray[Any]

_COUNTS_PER_SIGMA = 12.0  # rounding then adds 0.03 % to the noise

# Low-contrast balls: name, tissue, diameter mm, relative contrast; places of each subject below.
_FEATURES = (
    ("marrow spot", "marrow", 5.0, -0.22),
    ("marrow spot", "marrow", 4.0, -0.28),
    ("marrow spot", "marrow", 4.0, -0.22),
    ("marrow spot", "marrow", 6.0, -0.14),
    ("cartilage defect", "cartilage", 3.0, -0.35),
    ("cartilage defect", "cartilage", 3.6, 0.25),
    ("fat-pad strand", "fat", 4.0, -0.20),
    ("fat-pad strand", "fat", 3.0, -0.30),
    ("muscle oedema", "muscle", 6.0, 0.18),
    ("muscle oedema", "muscle", 4.5, 0.25),
)
# Knee coordinates (lateral, anterior, superior) in mm; a test checks the tissue at each.
_PLACES = {
    "a": (
        (-20.8, 0.1, 10.6),
        (18.7, 4.6, 15.5),
        (-13.6, -10.7, -14.9),
        (18.2, -4.3, -15.3),
        (-20.5, 1.1, -3.1),
        (16.8, -6.9, -1.1),
        (-5.9, 34.5, -6.5),
        (6.2, 36.7, -2.2),
        (-17.2, -35.2, -23.9),
        (24.6, -37.4, -29.5),
    ),
    "b": (
        (-19.7, -2.8, 11.2),
        (18.0, 4.6, 15.7),
        (-16.4, -8.2, -15.5),
        (15.6, 0.7, -19.3),
        (-18.2, -2.3, -3.5),
        (19.1, -5.7, -0.6),
        (-5.9, 35.1, -7.5),
        (9.3, 36.0, -0.1),
        (-16.7, -37.4, -21.3),
        (21.1, -37.3, -30.5),
    ),
    "c": (
        (-22.3, 0.6, 12.9),
        (19.9, 3.8, 11.7),
        (-12.8, -6.7, -13.6),
        (13.5, -0.5, -18.2),
        (-18.0, -0.9, -2.3),
        (18.3, 0.7, -0.9),
        (-3.5, 34.9, -6.7),
        (7.1, 37.9, -2.2),
        (-18.8, -39.9, -20.7),
        (20.3, -40.1, -30.1),
    ),
}


@dataclass(frozen=True)
class Subject:
    """One invented subject and the scans made of it."""

    name: str
    knee: Knee
    shift_mm: tuple[float, float, float]
    snr: float
    slices: bool


def _subject(name: str, seed: int, snr: float, slices: bool, **look: Any) -> Subject:
    draw = stream(seed, "subject")
    scale = tuple(1.0 + 0.035 * draw.uniform(-1.0, 1.0, 3))
    shift = tuple(float(v) for v in np.round(draw.uniform(-1.0, 1.0, 3) * (1.5, 1.5, 3.0), 2))
    features = tuple(
        Feature(what, tissue, place, diameter, contrast)
        for (what, tissue, diameter, contrast), place in zip(_FEATURES, _PLACES[name], strict=True)
    )
    knee = Knee(seed, scale, features=features, **look)  # type: ignore[arg-type]
    return Subject(name, knee, shift, snr, slices)  # type: ignore[arg-type]


def subjects() -> tuple[Subject, ...]:
    """The three invented subjects."""
    return (
        _subject("a", 4711, 26.0, True, fat_mm=5.5),
        _subject("b", 5283, 21.0, False, mirror=True, fat_mm=7.5),
        _subject("c", 6029, 30.0, True, fat_mm=4.2),
    )


GRE = GradientEcho(repetition_time_ms=20.0, echo_time_ms=4.6, flip_degrees=12.0)
TSE = EchoTrain(repetition_time_ms=2800.0, spacing_ms=9.0, echoes=8)


def gradient_echo_grid(subject: Subject) -> Geometry:
    """Acquired grid of the subject's 3-D scan."""
    dx, dy, dz = subject.shift_mm
    return Geometry((112, 128, 56), (1.05, 1.05, 2.0), "zyx", (4.0 + dz, -1.5 + dy, dx))


def gradient_echo(subject: Subject) -> tuple[Array, Geometry, float]:
    """The subject's 3-D scan with noise, its grid and its sigma."""
    grid = gradient_echo_grid(subject)
    clean = gradient_echo_volume(subject.knee, grid, GRE)
    return _noisy(clean, subject, "gre3d", 1.0, grid)


def knee_kspace(name: str, sensitivity: Sensitivity | None = None) -> Array:
    """Noise-free k-space of a sample subject's 3-D scan, without inverse crime.

    The object is never rasterised at the grid of the recovery: receive fields multiply it on the
    fine grid, and k-space is cut from there.

    Parameters
    ----------
    name : {"a", "b", "c"}
        Subject.
    sensitivity : callable, optional
        Receive fields at three vectors of positions in mm from the field of view's centre, along
        readout (head), phase (front) and partition (right), shape (channel, i, j, k): for example
        ``simulate_coils((112, 128, 56), (1.05, 1.05, 2.0)).on_grid``. One channel with the
        shading of a combined image if left out.

    Returns
    -------
    ndarray of complex64, shape (plane, channel, u, v)
        Centred, the readout transformed: plane is the readout position, u phase, v partition.
    """
    by_name = {subject.name: subject for subject in subjects()}
    if name not in by_name:
        raise MricsError(
            f"Subject {name!r} is not one of {', '.join(sorted(by_name))}.",
            "name",
            "Name one of them.",
        )
    subject = by_name[name]
    images = gradient_echo_volume(
        subject.knee, gradient_echo_grid(subject), GRE, sensitivity=sensitivity
    )
    if sensitivity is None:
        images = images[None]
    return centred_fft(np.ascontiguousarray(images.transpose(1, 0, 2, 3)))


def echo_train(subject: Subject) -> tuple[Array, Geometry, float]:
    """The subject's 2-D multi-slice scan with noise, its grid and its sigma."""
    dx, dy, dz = subject.shift_mm
    grid = Geometry((176, 160, 18), (0.7, 0.7, 3.8), "zxy", (2.0 + dz, dx, dy))
    clean = echo_train_slices(subject.knee, grid, TSE)
    return _noisy(clean, subject, "tse2d", 0.9, grid)


def _noisy(
    clean: Array, subject: Subject, name: str, share: float, grid: Geometry
) -> tuple[Array, Geometry, float]:
    magnitude = np.abs(clean)
    bright = magnitude > 0.15 * np.percentile(magnitude, 99.0)
    sigma = float(magnitude[bright].mean() / (share * subject.snr))
    # Three digits: the scale of the stored counts then does not hang on the last bit of a mean.
    sigma = float(f"{sigma:.3g}")
    noise = white_noise(clean.shape, sigma, subject.knee.seed, name)
    return clean + noise, grid, sigma


def make_sample_data(out_dir: str | os.PathLike[str]) -> list[Path]:
    """Make every sample scan, the list of features and the table of hashes.

    Parameters
    ----------
    out_dir : path
        Folder to write to; made where it does not exist.

    Returns
    -------
    list of Path
        Files written: pairs ``sub-X_acq-A_part-real_PDw.nii.gz`` and ``..._part-imag_...`` of int16
        counts with ``scl_slope``, ``features.json`` and ``SHA256SUMS``.
    """
    folder = Path(out_dir)
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise MricsError(
            f"Folder {folder} cannot be made: {error.strerror}.",
            str(folder),
            "Name a folder that may be written to.",
        ) from error
    written: list[Path] = []
    known: dict[str, Any] = {"caution": RESEARCH_ONLY, "subjects": {}}
    for subject in subjects():
        scans = {"gre3d": gradient_echo(subject)}
        if subject.slices:
            scans["tse2d"] = echo_train(subject)
        for acquisition, (data, grid, sigma) in scans.items():
            stem = f"sub-{subject.name}_acq-{acquisition}"
            written += write_pair(folder, stem, data, grid.affine, sigma / _COUNTS_PER_SIGMA)
        known["subjects"][f"sub-{subject.name}"] = _features(subject, scans)
    text = json.dumps(known, indent=1) + "\n"
    written.append(_write(folder / "features.json", text.encode()))
    sums = "".join(f"{hashlib.sha256(p.read_bytes()).hexdigest()}  {p.name}\n" for p in written)
    written.append(_write(folder / "SHA256SUMS", sums.encode()))
    return written


def _features(subject: Subject, scans: dict[str, tuple[Array, Geometry, float]]) -> dict[str, Any]:
    side = -1.0 if subject.knee.mirror else 1.0
    rows = []
    for item in subject.knee.features:
        x, y, z = item.centre_mm
        world = np.array([side * x, y, z, 1.0])
        index = {
            name: [round(float(v), 2) for v in (np.linalg.inv(grid.affine) @ world)[:3]]
            for name, (_, grid, _) in scans.items()
        }
        rows.append(
            {
                "name": item.name,
                "tissue": item.tissue,
                "world_mm": [round(float(v), 2) for v in world[:3]],
                "voxel": index,
                "diameter_mm": item.diameter_mm,
                "contrast": item.contrast,
            }
        )
    noise = {name: float(f"{sigma:.3g}") for name, (_, _, sigma) in scans.items()}
    return {"sigma": noise, "features": rows}


def to_counts(data: Array, slope: float) -> tuple[Array, Array]:
    """Real and imaginary part as int16 counts of ``slope`` each."""
    parts = (np.rint(part / slope) for part in (data.real, data.imag))
    real, imaginary = (np.clip(part, -32767, 32767).astype(np.int16) for part in parts)
    return real, imaginary


def write_pair(folder: Path, stem: str, data: Array, affine: Array, slope: float) -> list[Path]:
    """Write a complex volume as a real and an imaginary int16 file."""
    real, imaginary = to_counts(data, slope)
    return [
        _write_nifti(folder / f"{stem}_part-{part}_PDw.nii.gz", counts, affine, slope)
        for part, counts in (("real", real), ("imag", imaginary))
    ]


def _write_nifti(path: Path, counts: Array, affine: Array, slope: float) -> Path:
    import nibabel as nib

    header = nib.Nifti1Header()
    header.set_data_dtype(np.int16)
    header.set_data_shape(counts.shape)
    header.set_zooms(tuple(np.linalg.norm(affine[:3, :3], axis=0)))
    header.set_xyzt_units("mm", "sec")
    header.set_dim_info(freq=0, phase=1, slice=2)
    header.set_sform(affine, code="scanner")
    header.set_qform(affine, code="scanner")
    header.set_slope_inter(slope, 0.0)
    header["descrip"] = NIFTI_DESCRIP.encode()
    header["vox_offset"] = 352
    header["magic"] = b"n+1"
    raw = header.binaryblock + bytes(4) + counts.astype("<i2").tobytes(order="F")
    return _write(path, gzip.compress(raw, compresslevel=9, mtime=0))


def _write(path: Path, content: bytes) -> Path:
    partial = path.with_name(f".{path.name}.part")
    partial.write_bytes(content)
    os.replace(partial, path)
    return path
