"""Frames that are copies of each other."""

from __future__ import annotations

import numpy as np

from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.view import ScanView

# RMS difference of two frames in units of what their noise alone makes.
COPY = 0.2


def identical_frames(view: ScanView) -> tuple[Finding, ...]:
    """Frames whose difference is far below noise (0.2 x sqrt 2 sigma; 0 for exact copies)."""
    data = view.scan.data
    if data.ndim < 4 or data.shape[3] < 2:
        return ()
    frames = data[..., 0] if data.ndim == 5 else data
    sigma = max(view.noise.sigma, np.finfo(np.float32).tiny)
    parts = 2 if np.iscomplexobj(frames) else 1
    ratios = []
    for frame in range(frames.shape[3] - 1):
        change = (frames[..., frame + 1] - frames[..., frame])[view.mask]
        rms = float(np.sqrt(np.mean(np.square(np.abs(change)), dtype=np.float64)))
        ratios.append(rms / (sigma * np.sqrt(2 * parts)))
    copies = [n for n, ratio in enumerate(ratios) if ratio < COPY]
    if not copies:
        return ()
    return (
        Finding(
            code="identical-frames",
            what=f"{len(copies)} of {len(ratios)} neighbouring pairs of frames are copies, the "
            f"first {copies[0]} and {copies[0] + 1}.",
            where=f"frame {copies[0] + 1}",
            statistic=min(ratios),
            threshold=COPY,
            bias="Copies add no information: a joint recovery gains from them as from no "
            "measurement, and intervals over frames are too narrow.",
            advice="Keep one of each, or export the frames again.",
        ),
    )
