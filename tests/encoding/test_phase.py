"""A smooth phase for magnitude scans: strength, smoothness, and what it does to k-space."""

from __future__ import annotations

import numpy as np
import pytest

from mrics.encoding.phase import smooth_phase, with_phase
from mrics.errors import AcquisitionError
from mrics.numerics import centred_fft
from mrics.scan.volume import Scan


def magnitude_scan(frames: int = 1) -> Scan:
    shape = (24, 20, 16) if frames == 1 else (24, 20, 16, frames)
    data = np.random.default_rng(1).uniform(1.0, 2.0, shape).astype(np.float32)
    return Scan(data, np.diag([2.0, 2.0, 3.0, 1.0]), (2.0, 2.0, 3.0), complex_source="magnitude")


@pytest.mark.parametrize("shape", [(64, 48, 20), (33, 7, 1), (5, 5, 5)])
def test_strength_is_the_standard_deviation(shape: tuple[int, int, int]) -> None:
    phase = smooth_phase(shape, (1.0, 1.0, 3.0), 0.8, seed=5)
    assert phase.shape == shape
    assert phase.std() == pytest.approx(0.8, rel=1e-4)
    assert abs(phase.mean()) < 1e-4


def test_phase_is_smooth_and_depends_on_the_seed_alone() -> None:
    phase = smooth_phase((64, 64, 32), (1.0, 1.0, 2.0), 1.0, seed=2)
    steps = [np.abs(np.diff(phase, axis=axis)).max() for axis in range(3)]
    assert max(steps) < 0.5
    assert np.array_equal(phase, smooth_phase((64, 64, 32), (1.0, 1.0, 2.0), 1.0, seed=2))
    assert not np.allclose(phase, smooth_phase((64, 64, 32), (1.0, 1.0, 2.0), 1.0, seed=3))


def test_magnitude_stays_and_k_space_is_no_longer_hermitian() -> None:
    scan = magnitude_scan()
    turned = with_phase(scan, 0.8, seed=1)
    assert turned.data.dtype == np.complex64
    assert np.allclose(np.abs(turned.data), scan.data, rtol=1e-6)
    assert not turned.magnitude_only
    kspace = centred_fft(turned.data[:, :, 8])[1:, 1:]
    asymmetry = np.linalg.norm(kspace - kspace[::-1, ::-1].conj()) / np.linalg.norm(kspace)
    assert asymmetry > 0.2


def test_all_frames_get_one_phase() -> None:
    turned = with_phase(magnitude_scan(3), 0.5)
    angles = np.angle(turned.data)
    assert np.allclose(angles, angles[..., :1], atol=1e-5)


def test_strength_zero_leaves_the_scan() -> None:
    scan = magnitude_scan()
    assert with_phase(scan, 0.0) is scan


@pytest.mark.parametrize("strength", [-0.1, float("nan"), float("inf")])
def test_bad_strength_is_refused(strength: float) -> None:
    with pytest.raises(AcquisitionError, match="phase strength of"):
        smooth_phase((4, 4, 4), (1.0, 1.0, 1.0), strength)


def test_scan_with_a_phase_is_refused() -> None:
    scan = Scan(np.ones((4, 4, 4), np.complex64), np.eye(4), (1.0, 1.0, 1.0))
    with pytest.raises(AcquisitionError, match="a phase of its own"):
        with_phase(scan, 0.5)
