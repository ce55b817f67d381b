"""Cases of open volumes on which recoveries with dictionaries are judged.

Magnitude slices with a smooth phase multiplied in, noise of 1 % of the maximum, power-law patterns:
1-D of exponent 2 with 20 central lines, R = 3; 2-D of exponent 3 with 24 x 24, R = 4 and 6.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import nibabel
import numpy as np
from numpy.typing import NDArray
from open_volumes import open_volume

from mrics.encoding import undersample
from mrics.encoding.acquisition import Acquisition
from mrics.quality import score_planes
from mrics.recovery import recover
from mrics.recovery.dictionary.store import Dictionary
from mrics.recovery.dictionary.training import Training, TrainingScan, train_dictionary
from mrics.sampling import draw_pattern

Array = NDArray[Any]
#: name: axes, acceleration, exponent, calibration
PATTERNS = {"1-D R 3": (1, 3, 2.0, 20), "2-D R 4": (2, 4, 3.0, 24), "2-D R 6": (2, 6, 3.0, 24)}


def planes_of(identity: str, which: Sequence[int], frames: int = 1) -> Array:
    """Axial slices (frame * plane, u, v) of a volume's first frames divided by their largest."""
    volume = np.asarray(nibabel.load(open_volume(identity)).dataobj, np.float64)
    volume = volume[..., :frames] if volume.ndim == 4 else volume[..., None]
    stack = volume.transpose(3, 2, 0, 1)[:, list(which)] / volume.max()
    return stack.reshape(-1, *stack.shape[2:])


def with_phase(planes: Array) -> Array:
    """The planes as complex64 with a smooth phase."""
    y, x = np.mgrid[-1 : 1 : planes.shape[1] * 1j, -1 : 1 : planes.shape[2] * 1j]
    return (planes * np.exp(1j * (0.6 * x + 0.9 * y * x - 0.7 * y * y + 0.3))).astype(np.complex64)


def acquired(planes: Array, pattern: str, seed: int = 1, frames: int = 0) -> Acquisition:
    """The planes undersampled, noise 1 % of their maximum; frames have complementary patterns."""
    axes, acceleration, exponent, calibration = PATTERNS[pattern]
    drawn = draw_pattern(
        planes.shape[1 : 1 + axes], law="power", exponent=exponent, acceleration=acceleration,
        calibration=calibration, seed=seed, frames=frames,
    )  # fmt: skip
    return undersample(with_phase(planes), drawn, sigma=0.01 * float(planes.max()), seed=seed)


def trained_on(planes: Sequence[Array], **settings: Any) -> Dictionary:
    """A dictionary of the default patch size from noise-free slices of one or more volumes."""
    scans = [TrainingScan(one, one > 0.05, largest=float(one.max())) for one in planes]
    return train_dictionary(scans, Training(**settings))


def judged(data: Acquisition, planes: Array, method: str, **settings: Any) -> dict[str, Any]:
    """Mean PSNR (dB, against each slice's maximum) and HFEN of a recovery's magnitude."""
    result = recover(data, method, **settings)
    scores = [
        score_planes(np.abs(image)[None], plane[None])[0]
        for image, plane in zip(result.image, planes, strict=True)
    ]
    return {
        "psnr": float(np.mean([one["psnr"] for one in scores])),
        "each": [one["psnr"] for one in scores],
        "hfen": float(np.mean([one["hfen"] for one in scores])),
        "note": result.certificate.note,
    }
