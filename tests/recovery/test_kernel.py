"""Missing lines from calibrated neighbours: the exact case, sizes, refusals."""

import numpy as np
import pytest
from receive import regular, scene

from mrics.encoding import undersample
from mrics.errors import AcquisitionError, MricsError, RecoveryError
from mrics.recovery import recover


def error(image, reference):
    return np.linalg.norm(image - reference) / np.linalg.norm(reference)


def test_a_coil_that_shifts_k_space_by_one_line_is_exact():
    # Source: Griswold 2002 (MRM 47:1202), Sodickson & Manning 1997 (MRM 38:591); derived from the
    # shift theorem: with coil 2 = coil 1 x exp(2 pi i y / FOV), S2(k) = S1(k - 1), so that every
    # missing line of one coil is a measured line of the other.
    # The object is band-limited: the line at the very edge has its partner beyond it.
    y, x = np.mgrid[-1:1:64j, -1:1:40j]
    images = (np.exp(-20 * (y**2 + x**2)) + 0.5 * np.exp(-60 * ((y - 0.4) ** 2 + x**2)))[None] + 0j
    turn = np.exp(2j * np.pi * np.arange(64) / 64)[:, None] * np.ones((1, 40))
    maps = np.stack([np.ones((64, 40)), turn]) / 2**0.5
    data = undersample(images, regular((64,), (2,), 24), sensitivities=maps[None])
    recovered = recover(data, "kernel", damping=1e-14)
    np.testing.assert_allclose(recovered.image, images, atol=1e-6 * np.abs(images).max())


@pytest.mark.parametrize(
    ("grid", "steps", "shift"),
    [((64,), (2,), 0), ((64,), (3,), 0), ((64, 48), (2, 2), 0), ((64, 48), (2, 2), 1)],
)
def test_far_closer_than_zero_filled(grid, steps, shift):
    # Eight smooth loops, lattices in one and two directions, the last with a shift per line
    # (Breuer 2006, MRM 55:549).
    maps, _, images = scene(64, 48, channels=8)
    pattern = regular(grid, steps, 24, shift)
    data = undersample(images, pattern, 1e-4, 1, sensitivities=maps[None])
    kernel = error(recover(data, "kernel").image, images)
    zero = error(recover(data, "zero-filled").image, images)
    assert kernel < 0.03
    assert kernel < zero / 3


def test_both_combinations_agree_in_magnitude():
    maps, inside, images = scene(64, 48, channels=8)
    data = undersample(images, regular((64,), (2,), 24), sensitivities=maps[None])
    one = np.abs(recover(data, "kernel").image)
    two = np.abs(recover(data, "kernel", combine="root-sum-of-squares").image)
    assert error(two[:, inside], one[:, inside]) < 0.01


def test_too_small_a_calibration_region_is_refused_with_the_smallest():
    maps, _, images = scene(64, 48, channels=8)
    data = undersample(images, regular((64,), (3,), 6), sensitivities=maps[None])
    with pytest.raises(RecoveryError, match=r"calibration") as caught:
        recover(data, "kernel")
    assert any(character.isdigit() for character in caught.value.fix)


def test_an_undersampled_calibration_region_is_refused():
    maps, _, images = scene(64, 48, channels=8)
    data = undersample(images, regular((64,), (2,), 0), sensitivities=maps[None])
    with pytest.raises(MricsError, match="calibration"):
        recover(data, "kernel")


def test_sensitivities_of_another_grid_and_bad_covariances_are_refused():
    maps, _, images = scene(64, 48, channels=4)
    pattern = regular((64,), (2,), 24)
    with pytest.raises(AcquisitionError, match="another grid"):
        undersample(images, pattern, sensitivities=maps[None, :, :, :-1])
    with pytest.raises(AcquisitionError, match="positive definite"):
        undersample(
            images, pattern, 0.1, sensitivities=maps[None], covariance=np.ones((4, 4)) - np.eye(4)
        )
