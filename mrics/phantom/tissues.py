"""Signal of each tissue in the sample sequences, from textbook equations.

Relaxation times are plausible inputs, not truth: near the 1.5 T columns of Stanisz et al. 2005
(Magn Reson Med 54:507-512) and Gold et al. 2004 (AJR 183:343-351) where those list the tissue,
else common practice. T2* and proton densities are common practice.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np


@dataclass(frozen=True)
class Tissue:
    """Relative proton density and relaxation times (ms); ``fat`` precesses 3.4 ppm slower."""

    density: float
    t1_ms: float
    t2_ms: float
    t2_star_ms: float
    fat: bool = False


TISSUES: dict[str, Tissue] = {
    "muscle": Tissue(0.74, 1000.0, 38.0, 26.0),
    "fat": Tissue(0.92, 290.0, 120.0, 28.0, fat=True),
    "marrow": Tissue(0.90, 290.0, 120.0, 11.0, fat=True),
    "red marrow": Tissue(0.70, 700.0, 50.0, 12.0),
    "cartilage": Tissue(0.86, 1040.0, 44.0, 26.0),
    "fluid": Tissue(1.00, 2800.0, 700.0, 140.0),
    "ligament": Tissue(0.55, 800.0, 14.0, 4.5),
    "tendon": Tissue(0.50, 800.0, 9.0, 2.5),
    "meniscus": Tissue(0.60, 900.0, 13.0, 6.0),
    "cortical": Tissue(0.16, 250.0, 3.0, 1.0),
    "skin": Tissue(0.65, 600.0, 24.0, 10.0),
    "nerve": Tissue(0.80, 1000.0, 55.0, 32.0),
    # Spins that flow in are fresh: a short effective T1 in the slab of the gradient echo, and a
    # void (no refocused signal) in the spin-echo train.
    "artery": Tissue(0.95, 330.0, 4.0, 90.0),
    "vein": Tissue(0.95, 650.0, 8.0, 60.0),
    "air": Tissue(0.0, 1000.0, 50.0, 50.0),
}


class Excitation(Protocol):
    """A sequence that gives each tissue one signal at one echo time."""

    @property
    def echo_time_ms(self) -> float:
        """Echo time."""

    def signal(self, tissue: Tissue) -> float:
        """Signal of a tissue."""


@dataclass(frozen=True)
class GradientEcho:
    """Spoiled gradient echo, steady state."""

    repetition_time_ms: float
    echo_time_ms: float
    flip_degrees: float

    def signal(self, tissue: Tissue) -> float:
        """M0 sin a (1 - E1)/(1 - E1 cos a) exp(-TE/T2*) (Ernst & Anderson 1966; Haacke et al.)."""
        decay = np.exp(-self.repetition_time_ms / tissue.t1_ms)
        angle = np.deg2rad(self.flip_degrees)
        steady = np.sin(angle) * (1.0 - decay) / (1.0 - decay * np.cos(angle))
        return float(tissue.density * steady * np.exp(-self.echo_time_ms / tissue.t2_star_ms))


@dataclass(frozen=True)
class EchoTrain:
    """Turbo spin echo with ``echoes`` echoes ``spacing_ms`` apart, k-space filled in segments."""

    repetition_time_ms: float
    spacing_ms: float
    echoes: int

    def steady(self, tissue: Tissue) -> float:
        """Magnetisation before T2 decay: M0 (1 - exp(-(TR - train)/T1))."""
        recovery = self.repetition_time_ms - self.spacing_ms * self.echoes
        return float(tissue.density * (1.0 - np.exp(-recovery / tissue.t1_ms)))

    def echo_times_ms(self, lines: int) -> np.ndarray:
        """Echo time of each phase-encode line, centred order: segment n holds echo n."""
        return (np.arange(lines) * self.echoes // lines + 1) * self.spacing_ms
