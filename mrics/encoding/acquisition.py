"""Undersampled multi-channel k-space with its noise level."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.numerics.scaling import times_power_of_two
from mrics.sampling.pattern import Pattern
from mrics.scan.volume import Axes


@dataclass(frozen=True)
class Acquisition:
    """What the scanner would hand over, simulated or measured.

    Attributes
    ----------
    kspace : ndarray of shape (plane, channel, u, v), complex64 or complex128
        Centred k-space, zero where nothing was acquired; may be memory-mapped.
    mask : ndarray of bool, shape (pattern, u, v) or (pattern, u, 1)
        Acquired samples, centred; a 1-D pattern acts along u and v is the readout (length 1 here).
    pattern_index : ndarray of int, shape (plane,)
        Which entry of ``mask`` each plane was acquired with.
    pattern : Pattern
        The pattern the mask was made of.
    sigma_scan : float
        Noise of the scan itself, standard deviation of the real part of one k-space sample.
    sigma_added : float
        Noise that was added in simulation, same unit.
    sensitivities : array of shape (plane or 1, channel, u, v) or None
        Receive sensitivities in image space, natural order; one frame's planes may stand for all.
        Anything that has a shape and gives ndarrays for slices of planes. None for one uniform
        channel, or for several whose sensitivities are to be estimated.
    covariance : ndarray of shape (channel, channel) or None
        Psi = E[n n^H]/2; None for sigma^2 times identity.
    compression : ndarray of shape (plane or 1, virtual, channel) or None
        Matrices of orthonormal rows that make virtual channels of the whitened channels.
    axes : Axes or None
        How planes lie in the file, None for a bare stack.
    volume_shape : tuple of int
        Shape of the source volume, for putting planes back; (plane, u, v) for a bare stack.
    calibration : tuple of int
        Fully sampled central positions along u (and v).
    notes : tuple of str
        What was simulated (phase, sensitivities), for the report.
    """

    kspace: NDArray[Any]
    mask: NDArray[np.bool_]
    pattern_index: NDArray[np.intp]
    pattern: Pattern
    sigma_scan: float = 0.0
    sigma_added: float = 0.0
    sensitivities: NDArray[Any] | None = None
    covariance: NDArray[Any] | None = None
    compression: NDArray[Any] | None = None
    axes: Axes | None = None
    volume_shape: tuple[int, ...] = ()
    calibration: tuple[int, ...] = (0,)
    notes: tuple[str, ...] = field(default=())

    def at_scale(self, exponent: int) -> Acquisition:
        """The acquisition with samples and noise times 2**exponent; itself where that is 0."""
        if exponent == 0:
            return self
        psi = self.covariance
        return replace(
            self,
            kspace=times_power_of_two(np.asarray(self.kspace), exponent),
            sigma_scan=math.ldexp(self.sigma_scan, exponent),
            sigma_added=math.ldexp(self.sigma_added, exponent),
            covariance=None if psi is None else times_power_of_two(psi, 2 * exponent),
        )

    @property
    def sigma(self) -> float:
        """Total noise: root of the sum of squares of scan noise and added noise."""
        return float(np.hypot(self.sigma_scan, self.sigma_added))

    @property
    def shape(self) -> tuple[int, int, int]:
        """Shape (plane, u, v) of the image stack."""
        return (self.kspace.shape[0], self.kspace.shape[2], self.kspace.shape[3])

    @property
    def channels(self) -> int:
        """Number of channels."""
        return int(self.kspace.shape[1])
