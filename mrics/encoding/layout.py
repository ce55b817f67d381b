"""Where the loops of a simulated receive array stand, and how their noise is correlated."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import AcquisitionError

Array = NDArray[Any]

# Centres of neighbouring loops at 1.5 radii do not couple (Roemer et al. 1990, Magn Reson Med
# 16:192-225).
_OVERLAP = 1.5


def cylinder(
    number: int, rows: int, half: Array, radius: float | None
) -> tuple[Array, Array, float]:
    """Centres and inward normals (across, across, along) and the loops' radius."""
    counts = [number // rows + (row < number % rows) for row in range(rows)]
    fine = np.linspace(0.0, 2.0 * np.pi, 4097)
    steps = np.hypot(*np.diff([half[0] * np.cos(fine), half[1] * np.sin(fine)], axis=1))
    length = np.concatenate([[0.0], np.cumsum(steps)])
    size = radius or min(length[-1] / max(counts) / _OVERLAP, float(min(half)))
    centres = []
    for row, count in enumerate(counts):
        along = (row - (rows - 1) / 2.0) * _OVERLAP * size
        place = (np.arange(count) + 0.5 * (row % 2)) / count * length[-1]
        angle = np.interp(place, length, fine)
        ring = [half[0] * np.cos(angle), half[1] * np.sin(angle), np.full(count, along)]
        centres.append(np.stack(ring, axis=1))
    points = np.concatenate(centres)
    normals = -points / np.array([half[0] ** 2, half[1] ** 2, np.inf])
    return points, normals / np.linalg.norm(normals, axis=1, keepdims=True), float(size)


def dome(number: int, half: Array, radius: float | None) -> tuple[Array, Array, float]:
    """Loops spread evenly over half an ellipsoid (golden-angle spiral), pole along the bore."""
    height = 1.0 - (np.arange(number) + 0.5) / number
    angle = np.arange(number) * np.pi * (3.0 - np.sqrt(5.0))
    ring = np.sqrt(1.0 - height**2)
    unit = np.stack([ring * np.cos(angle), ring * np.sin(angle), height], axis=1)
    mean = float(np.mean(half))
    # Hexagonal packing: each loop's cell of the half sphere is sqrt(3)/2 pitch^2.
    pitch = np.sqrt(2.0 * np.pi * mean**2 / number / (np.sqrt(3.0) / 2.0))
    points = unit * half
    normals = -points / half**2
    normals /= np.linalg.norm(normals, axis=1, keepdims=True)
    return points, normals, float(radius or min(pitch / _OVERLAP, min(half)))


def covariance(centres: Array, correlation: float) -> NDArray[np.float64]:
    """Identity plus ``correlation`` between each loop and those about as near as its nearest."""
    count = len(centres)
    psi = np.eye(count)
    if correlation == 0 or count == 1:
        return psi
    apart = np.linalg.norm(centres[:, None] - centres[None], axis=-1)
    np.fill_diagonal(apart, np.inf)
    near = apart <= 1.2 * apart.min(axis=1, keepdims=True)
    neighbours = (near | near.T).astype(float)
    psi += correlation * neighbours
    if np.linalg.eigvalsh(psi)[0] < 1e-6:
        largest = -1.0 / float(np.linalg.eigvalsh(neighbours)[0])
        raise AcquisitionError(
            f"A correlation of {correlation:g} between neighbours gives a covariance that is not "
            "positive definite.",
            "coils, correlation",
            f"Give less than {np.floor(1000 * largest) / 1000:g} for this array.",
        )
    return psi
