"""Tasks an observer is given: is the feature there; two points or one line.

A task is the difference of its two signals, as k-space samples of a plane: what an observer of
known signals decides by.

* detection: a disc of the given diameter, or nothing.
* two-against-one: two discs of half the given size, their middles one size apart, against a bar as
  wide as they are and as long as both together, of equal energy. Which of the two it is shows only
  where the pattern holds the frequencies that part them.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.errors import QualityError
from mrics.quality.features import disc_transform

Array = NDArray[Any]
TASKS = ("detection", "two-against-one")


@dataclass(frozen=True)
class Task:
    """One task at one size.

    Attributes
    ----------
    kind : str
        "detection" or "two-against-one".
    size_mm : float
        Diameter of the disc, or distance of the two points.
    amplitude : float
        Height of the feature, in the image's unit.
    axis : str
        Axis that the two points lie along: "u" or "v"; unused for detection.
    """

    kind: str
    size_mm: float
    amplitude: float = 1.0
    axis: str = "u"

    def __post_init__(self) -> None:
        if self.kind not in TASKS or self.axis not in ("u", "v"):
            raise QualityError(
                f"There is no task {self.kind!r} along {self.axis!r}.",
                "observers, task",
                f"Choose one of: {', '.join(TASKS)}, along u or v.",
            )
        if not self.size_mm > 0.0:
            raise QualityError(
                f"A task of size {self.size_mm} mm cannot be set.",
                "observers, size_mm",
                "Give a positive size in mm.",
            )

    @property
    def label(self) -> str:
        """For tables."""
        along = f" along {self.axis}" if self.kind == "two-against-one" else ""
        return f"{self.kind}{along}, {self.size_mm:g} mm"

    def kspace(
        self,
        shape: tuple[int, int],
        voxel_mm: tuple[float, float],
        site: tuple[float, float] | None = None,
    ) -> Array:
        """Difference of the two signals, centred orthonormal k-space of shape (u, v), complex128.

        Parameters
        ----------
        shape : tuple of int
        voxel_mm : tuple of float
        site : tuple of float, optional
            Voxel (u, v) of the feature's middle; N//2 if left out.
        """
        ku, kv = np.meshgrid(
            *(
                (np.arange(n) - n // 2) / (n * step)
                for n, step in zip(shape, voxel_mm, strict=True)
            ),
            indexing="ij",
        )
        k = np.hypot(ku, kv)
        # From integral to orthonormal sum: one cell per voxel, root of the voxel count.
        scale = self.amplitude / (voxel_mm[0] * voxel_mm[1] * np.sqrt(shape[0] * shape[1]))
        if self.kind == "detection":
            signal = disc_transform(0.5 * self.size_mm, k).astype(np.complex128)
        else:
            along, across = (ku, kv) if self.axis == "u" else (kv, ku)
            point = 0.5 * self.size_mm
            two = 2.0 * np.cos(np.pi * self.size_mm * along) * disc_transform(0.5 * point, k)
            bar = np.sinc((self.size_mm + point) * along) * np.sinc(point * across)
            bar *= np.linalg.norm(two) / np.linalg.norm(bar)
            signal = (two - bar).astype(np.complex128)
        if site is not None:
            shift = [
                (at - n // 2) * step for at, n, step in zip(site, shape, voxel_mm, strict=True)
            ]
            signal *= np.exp(-2j * np.pi * (ku * shift[0] + kv * shift[1]))
        return signal * scale
