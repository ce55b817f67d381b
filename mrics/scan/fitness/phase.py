"""Magnitude-only scans: k-space is Hermitian, half of it is redundant."""

from __future__ import annotations

from mrics.scan.fitness.finding import Finding
from mrics.scan.fitness.view import ScanView


def magnitude_only(view: ScanView) -> tuple[Finding, ...]:
    """The scan has no phase (it is real, or its imaginary part is zero everywhere)."""
    if view.has_phase:
        return ()
    return (
        Finding(
            code="magnitude-only",
            what="The scan is magnitude only: it cannot tell the phase that a measurement has.",
            where="whole scan",
            statistic=0.0,
            threshold=0.0,
            bias="Its k-space is Hermitian, so half of it is redundant: undersampling looks less "
            "harmful than on measured data.",
            advice="Use complex data (magnitude with phase, or real with imaginary part), or "
            "multiply a smooth phase in and say so.",
            remedy="add_phase",
        ),
    )
