"""Stored values: clipped at a limit, or too few levels."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.view import ScanView

# Voxels at the very end of the range, against what the next values hold.
LEAST_CLIPPED = 12
CLIPPED_RATIO = 4.0
# Levels of 8-bit data; a signed range has one more.
LEVELS = 257


def clipped(view: ScanView) -> tuple[Finding, ...]:
    """Many voxels share the largest value: the tail of the histogram ends in a pile.

    Each part (real and imaginary, or magnitude) is compared with the same number of voxels as lie
    in the next 1 % of the range below; a natural tail thins out towards its end.
    """
    findings = []
    parts = {"magnitude": view.magnitude}
    if view.has_phase:
        parts |= {"real part": view.volume.real, "imaginary part": view.volume.imag}
    for name, values in parts.items():
        for end, signed in (("top", values), ("bottom", -values)):
            if end == "bottom" and name == "magnitude":
                continue
            pile, ratio = _pile(signed)
            if pile >= LEAST_CLIPPED and ratio >= CLIPPED_RATIO:
                findings.append(_clipped_finding(name, end, pile, ratio))
    return tuple(findings[:1])


def _pile(values: NDArray[Any]) -> tuple[int, float]:
    """Voxels within rounding of the largest value, and their ratio to those of the 1 % below."""
    top = float(values.max())
    if top <= 0:
        return 0, 0.0
    near = values[values > 0.99 * top]
    pile = int(np.count_nonzero(near >= top * (1 - 1e-6)))
    # Levels in that 1 %: on coarse data the pile may be the only one there.
    levels = np.unique(near)
    if len(levels) < 3:
        near = values[values > 0.9 * top]
        levels = np.unique(near)
    others = max(len(near) - pile, 1) / max(len(levels) - 1, 1)
    return pile, pile / max(others, 1.0)


def _clipped_finding(name: str, end: str, pile: int, ratio: float) -> Finding:
    return Finding(
        code="clipped",
        what=f"{pile} voxels share the {'largest' if end == 'top' else 'smallest'} value of the "
        f"{name}: values were clipped.",
        where=f"{name}, {end} of the range",
        statistic=ratio,
        threshold=CLIPPED_RATIO,
        bias="Bright structures are flat in the reference, which no measurement is: errors there "
        "are not those of the method, and the data range of scores is too small.",
        advice="Export with more bits or another window; leave the clipped voxels out.",
    )


def coarse_levels(view: ScanView) -> tuple[Finding, ...]:
    """No more than 256 different values in the volume, or in every slice of it (8-bit origin)."""
    if view.has_phase:
        counts = [_most_levels(part) for part in (view.volume.real, view.volume.imag)]
        levels = max(counts)
    else:
        levels = _most_levels(view.magnitude)
    if levels > LEVELS:
        return ()
    return (
        Finding(
            code="coarse-levels",
            what=f"A slice holds no more than {levels} different values: the data comes from 8 "
            "bits or fewer.",
            where="whole scan",
            statistic=float(levels),
            threshold=float(LEVELS),
            bias="Rounding replaced noise and faint contrast; an accelerated image cannot lose "
            "what is not there.",
            advice="Use the original data of 12 bits or more.",
            remedy="add_noise",
        ),
    )


def _most_levels(part: NDArray[Any]) -> int:
    """Largest number of different values in a slice of the middle half of the volume."""
    depth = part.shape[2]
    slices = np.unique(np.linspace(depth // 4, max(depth - depth // 4 - 1, 0), 5).astype(int))
    return max(len(np.unique(part[:, :, k])) for k in slices)
