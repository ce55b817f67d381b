"""A small complex scan and a protocol for it, for tests of whole studies."""

from __future__ import annotations

from pathlib import Path

import nibabel
import numpy as np
from numpy.typing import NDArray

AFFINE = np.array([[-1.0, 0, 0, 30], [0, 1.2, 0, -20], [0, 0, 3.0, 5], [0, 0, 0, 1]])

PROTOCOL = """\
[protocol]
title = "Small object"
question = "Is a third of the lines enough?"
[sequence]
family = "gradient-echo-2d"
repetition_time_ms = 500.0
echo_time_ms = 5.0
[grid]
readout_axis = "i"
phase_axis = "j"
[today]
sampling = "equispaced"
acceleration = 2
calibration = 8
recovery = "zero-filled"
[[sampling]]
name = "power law"
law = "power"
exponent = 3.0
draw = "exact-count"
acceleration = [2, 3]
calibration = 8
[[recovery]]
method = "zero-filled"
[acceptance]
nrmse_max = 0.5
[study]
scans = ["object_*.nii.gz"]
draws = 2
seed = 7
"""


def small_object(seed: int, shape: tuple[int, int, int] = (44, 40, 5)) -> NDArray[np.complex64]:
    """Two ellipsoids with a smooth phase and complex noise, no symmetry."""
    rng = np.random.default_rng(seed)
    x, y, z = np.meshgrid(*(np.linspace(-1, 1, n) for n in shape), indexing="ij")
    image = 100.0 * ((x / 0.8) ** 2 + (y / 0.7) ** 2 + (z / 1.5) ** 2 < 1)
    image += 40.0 * (((x - 0.3) / 0.2) ** 2 + ((y + 0.2) / 0.3) ** 2 + (z / 1.2) ** 2 < 1)
    image = image * np.exp(1j * (0.6 * x - 0.4 * y * x + 0.1 * seed))
    noise = rng.standard_normal((*shape, 2)) @ np.array([1.0, 1j])
    return (image + noise).astype(np.complex64)


def write_small_study(
    folder: Path,
    scans: int = 2,
    protocol: str = PROTOCOL,
    shape: tuple[int, int, int] = (44, 40, 5),
) -> Path:
    """Write the scans and the protocol; return the protocol's path."""
    folder.mkdir(parents=True, exist_ok=True)
    for number in range(scans):
        image = nibabel.Nifti1Image(small_object(number, shape), AFFINE)
        image.header.set_xyzt_units("mm", "sec")
        nibabel.save(image, folder / f"object_{number}.nii.gz")
    path = folder / "protocol.toml"
    path.write_text(protocol)
    return path
