"""Scans of the invented knee at finite resolution, on grids small enough to make here."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pytest

from mrics.encoding import simulate_coils
from mrics.errors import MricsError
from mrics.numerics import centred_fft
from mrics.phantom import knee_kspace
from mrics.phantom.knee import Knee
from mrics.phantom.record import FAT_SHIFT_HZ, Geometry, echo_train_slices, gradient_echo_volume
from mrics.phantom.tissues import TISSUES, EchoTrain, GradientEcho, Tissue

GRE = GradientEcho(20.0, 4.6, 12.0)
GRID = Geometry((28, 32, 14), (4.2, 4.2, 8.0), "zyx")


@pytest.fixture(scope="module")
def knee() -> Knee:
    return Knee(99)


def test_coarse_scan_is_the_centre_of_a_finer_scans_k_space(knee: Knee) -> None:
    """Both are cut from one continuous object, so they share their k-space: no raster is involved.

    The field of view is the same, so the coarse scan's samples are the fine scan's inner ones.
    """
    fine_grid = replace(GRID, matrix=(28, 64, 28), voxel_mm=(4.2, 2.1, 4.0))
    fine = gradient_echo_volume(knee, fine_grid, GRE, factor=(4, 3, 4))
    coarse = gradient_echo_volume(knee, GRID, GRE, factor=(4, 6, 8))
    inner = centred_fft(fine, axes=(1, 2))[:, 16:48, 7:21] / 2.0
    other = centred_fft(coarse, axes=(1, 2))
    assert np.linalg.norm(inner - other) / np.linalg.norm(other) < 1e-5


def test_supersampling_of_the_sample_scans_has_converged(knee: Knee) -> None:
    """Twice as fine a grid in every direction changes a slab by 2.5 %; the scans' noise is 4 %."""
    slab = Geometry((4, 128, 56), (1.05, 1.05, 2.0), "zyx", (12.0, 0.0, 0.0))
    once = gradient_echo_volume(knee, slab, GRE, factor=(2, 2, 4))
    twice = gradient_echo_volume(knee, slab, GRE, factor=(4, 4, 8))
    assert np.linalg.norm(once - twice) / np.linalg.norm(twice) < 0.03


def test_constant_receive_fields_scale_the_channels(knee: Knee) -> None:
    def fields(z: np.ndarray, y: np.ndarray, x: np.ndarray) -> np.ndarray:
        ones = np.ones((len(z), len(y), len(x)), np.complex64)
        return np.stack([ones, (0.5 - 0.25j) * ones])

    got = gradient_echo_volume(knee, GRID, GRE, sensitivity=fields)
    assert got.shape == (2, *GRID.matrix)
    assert np.allclose(got[1], (0.5 - 0.25j) * got[0], atol=1e-6)


def test_coil_images_differ_from_maps_times_image_by_little_but_not_nothing(knee: Knee) -> None:
    """The honest multi-channel object: channels are near maps x image, and not equal to it."""
    coils = simulate_coils(GRID.matrix, GRID.voxel_mm, number=6)
    images = gradient_echo_volume(knee, GRID, GRE, factor=(4, 4, 8), sensitivity=coils.on_grid)
    axes = [GRID.coordinate(axis) for axis in range(3)]
    maps = coils.on_grid(*axes)
    combined = (maps.conj() * images).sum(axis=0) / (np.abs(maps) ** 2).sum(axis=0)
    rest = np.linalg.norm(images - maps * combined) / np.linalg.norm(images)
    assert 0.003 < rest < 0.1


@dataclass(frozen=True)
class OneKind:
    """A sequence that sees fat or water alone."""

    fat: bool
    echo_time_ms: float = 4.6

    def signal(self, tissue: Tissue) -> float:
        return float(tissue.fat == self.fat)


@pytest.mark.parametrize(("fat", "voxels"), [(True, 2), (False, 0)])
def test_fat_alone_is_displaced_along_the_readout(knee: Knee, fat: bool, voxels: int) -> None:
    """217 Hz at 1.5 T (3.4 ppm, common practice) over the bandwidth per voxel."""
    sequence = OneKind(fat)
    plain = gradient_echo_volume(knee, GRID, sequence, bandwidth_hz=1e12)
    moved = gradient_echo_volume(knee, GRID, sequence, bandwidth_hz=FAT_SHIFT_HZ / 2)
    back = np.roll(moved, -voxels, axis=0)[2:-2]
    assert np.linalg.norm(back - plain[2:-2]) / np.linalg.norm(plain) < 1e-5


def test_echo_train_weights_each_phase_line_by_its_echo() -> None:
    train = EchoTrain(2800.0, 9.0, 8)
    times = train.echo_times_ms(160)
    assert times[0] == 9.0
    assert times[-1] == 72.0
    assert times[80] == 45.0
    assert np.all(np.diff(times) >= 0)
    knee = Knee(99)
    grid = Geometry((30, 30, 1), (4.0, 4.0, 4.0), "zxy")
    short = echo_train_slices(knee, grid, EchoTrain(2800.0, 1e-6, 8))
    long = echo_train_slices(knee, grid, EchoTrain(2800.0, 9.0, 8))
    ratio = np.abs(centred_fft(long, axes=(0, 1))) / np.abs(centred_fft(short, axes=(0, 1)))
    early, late = np.median(ratio[:, :4]), np.median(ratio[:, -4:])
    # Fat (T2 120 ms) and marrow hold most of the signal: exp(-(72 - 9)/120) = 0.59.
    assert late / early == pytest.approx(0.59, abs=0.15)


@pytest.mark.parametrize(
    ("repetition", "flip", "t1", "expected"),
    [
        (10.0, 8.0893, 1000.0, 0.0707104),
        (20.0, 11.4210, 1000.0, 0.0999983),
        (10.0, 15.0, 1000.0, 0.0589510),
    ],
)
def test_gradient_echo_signal(repetition: float, flip: float, t1: float, expected: float) -> None:
    """Spoiled steady state at and off the Ernst angle (Ernst & Anderson 1966; Haacke et al.)."""
    tissue = Tissue(1.0, t1, 50.0, 1e12)
    assert GradientEcho(repetition, 5.0, flip).signal(tissue) == pytest.approx(expected, abs=1e-6)


def test_tissue_table_keeps_the_order_of_published_values() -> None:
    """Of these, fat has the shortest T1, fluid the longest T2 (Stanisz 2005, Gold 2004)."""
    soft = ("muscle", "cartilage", "fat", "fluid", "nerve")
    assert min(soft, key=lambda name: TISSUES[name].t1_ms) == "fat"
    assert max(soft, key=lambda name: TISSUES[name].t2_ms) == "fluid"
    assert TISSUES["cartilage"].t1_ms == pytest.approx(1038, rel=0.1)
    assert TISSUES["muscle"].t2_ms == pytest.approx(40, rel=0.15)


def test_affine_puts_the_offset_at_the_middle_voxel() -> None:
    grid = Geometry((10, 8, 6), (1.0, 2.0, 3.0), "zxy", (5.0, -1.0, 2.0))
    world = grid.affine @ np.array([5, 4, 3, 1.0])
    assert np.allclose(world[:3], [-1.0, 2.0, 5.0])  # x from j, y from k, z from i
    assert np.allclose(grid.coordinate(0, 2)[10], 5.0)


def test_unknown_subject_is_refused() -> None:
    with pytest.raises(MricsError, match="Subject 'z' is not one of a, b, c"):
        knee_kspace("z")


def test_points_beyond_the_textures_are_refused() -> None:
    palette = dict.fromkeys(TISSUES, (0, 1.0))
    with pytest.raises(MricsError, match="Points reach 80 mm, the object 62 mm"):
        Knee(99).signal(np.zeros(1), np.zeros(1), np.array([80.0]), palette)


def test_leg_outside_the_block_gives_nothing() -> None:
    knee = Knee(99)
    far = np.array([60.0])
    palette = dict.fromkeys(TISSUES, (0, 1.0))
    assert not knee.signal(np.array([0.0]), far, far, palette).any()
