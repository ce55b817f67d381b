"""Golden-angle spokes and spirals on the grid."""

import numpy as np
import pytest
from scipy.ndimage import binary_dilation

from mrics.errors import PatternError
from mrics.sampling import draw_pattern
from mrics.sampling.radial import golden_angle, spiral_arm, spoke


def test_golden_angles():
    # 180/phi (Winkelmann et al. 2007); 180/(phi + m - 1), m = 1 ... 7 (Wundrak et al. 2016;
    # formula from memory)
    assert golden_angle() == pytest.approx(111.246118, abs=5e-7)
    small = [111.2461, 68.7539, 49.7508, 38.9776, 32.0397, 27.1984, 23.6281]
    np.testing.assert_allclose([golden_angle(m) for m in range(1, 8)], small, atol=6e-5)


@pytest.mark.parametrize(
    ("number", "gaps"), [(13, (16.230590, 10.031056)), (21, (10.031056, 6.199534)), (20, None)]
)
def test_golden_spokes_leave_two_or_three_gaps(number, gaps):
    # three-gap theorem; two sizes for Fibonacci numbers
    angles = np.sort((np.arange(number) * golden_angle()) % 180)
    found = np.unique(np.round(np.diff([*angles, angles[0] + 180]), 6))
    assert len(found) == (2 if gaps else 3)
    if gaps:
        np.testing.assert_allclose(sorted(found), sorted(gaps), atol=2e-6)


def test_golden_arms_leave_two_or_three_gaps_of_the_full_turn():
    # arms start at one end only: 360/phi = 222.492236 deg, the same theorem on the full circle
    pattern = draw_pattern((256, 256), pattern="spiral", acceleration=10, calibration=0, turns=0.01)
    ends = []
    for shot in range(13):
        at = np.argwhere(pattern.mask)[pattern.order[:, 0] == shot]
        far = at[np.argmax(((at - 128) ** 2).sum(axis=1))] - 128
        ends.append(np.degrees(np.arctan2(far[1], far[0])) % 360)
    found = np.diff([*np.sort(ends), min(ends) + 360])
    sizes = np.array([2 * 16.230590, 2 * 10.031056])
    assert np.abs(found[:, None] - sizes).min(axis=1).max() < 1  # to the rounding of the grid


@pytest.mark.parametrize("size", [64, 256])
def test_radial_nyquist(size):
    # pi/2 N diametral spokes (256: 403): step along the rim at most one position (textbook)
    number = int(np.ceil(np.pi / 2 * size))
    assert size != 256 or number == 403
    mask = np.zeros(size * size, dtype=bool)
    for angle in np.arange(number) * 180 / number:
        mask[spoke((size, size), angle)] = True
    k = np.arange(size) - size // 2
    inside = np.hypot(k[:, None], k[None, :]) <= size / 2 - 1
    grown = binary_dilation(mask.reshape(size, size))
    assert grown[inside].all()
    fewer = np.zeros(size * size, dtype=bool)
    for angle in np.arange(number // 4) * 180 / (number // 4):
        fewer[spoke((size, size), angle)] = True
    assert not binary_dilation(fewer.reshape(size, size))[inside].all()


def test_twenty_two_spokes_hold_at_most_their_samples():
    # 22 x 512 / 512^2 = 4.30 % (Candes, Romberg, Tao 2006 use 22 lines; 512 per line from memory)
    paths = [spoke((512, 512), i * 180 / 22) for i in range(22)]
    assert max(len(path) for path in paths) <= 512
    share = np.unique(np.concatenate(paths)).size / 512**2
    assert 0.03 < share <= 22 * 512 / 512**2


def test_spokes_and_arms_step_to_neighbours():
    for path in (spoke((96, 64), 33.0), spiral_arm((96, 64), 10.0, 2.0)):
        u, v = np.unravel_index(path, (96, 64))
        assert np.maximum(np.abs(np.diff(u)), np.abs(np.diff(v))).max() <= 2
    u, v = np.unravel_index(spiral_arm((96, 64), 0.0, 2.0), (96, 64))
    assert (u[0], v[0]) == (48, 32)
    ends = np.hypot((u[-1] - 48) / 48, (v[-1] - 32) / 32)
    assert ends == pytest.approx(1, abs=0.06)


@pytest.mark.parametrize("family", ["spokes", "spiral"])
@pytest.mark.parametrize("acceleration", [3, 6, 12])
def test_whole_spokes_come_nearest_to_the_request(family, acceleration):
    shape = (128, 96)
    pattern = draw_pattern(shape, pattern=family, acceleration=acceleration, calibration=0)
    asked = round(np.prod(shape) / acceleration)
    assert pattern.settings["requested_count"] == asked
    longest = np.bincount(pattern.order[:, 0]).max()
    assert abs(pattern.mask.sum() - asked) <= longest / 2 + 1
    shots, counts = np.unique(pattern.order[:, 0], return_counts=True)
    assert list(shots) == list(range(len(shots)))
    for shot, count in zip(shots, counts, strict=True):
        echoes = pattern.order[pattern.order[:, 0] == shot, 1]
        assert sorted(echoes) == list(range(count))


def test_spokes_respect_shutter_and_calibration():
    pattern = draw_pattern(
        (128, 96), pattern="spokes", acceleration=6, calibration=12, partial_fourier=0.75
    )
    assert not pattern.mask[:32].any()
    assert pattern.mask[58:70, 42:54].all()
    assert len(pattern.order) == pattern.mask.sum()


def test_spokes_that_cannot_be():
    with pytest.raises(PatternError, match="'spokes' needs a 2-D grid"):
        draw_pattern((128,), pattern="spokes")
    with pytest.raises(PatternError, match=r"cover \d+ positions, not the 12288"):
        draw_pattern((128, 96), pattern="spokes", acceleration=1, calibration=0)
    with pytest.raises(PatternError, match="alone holds 576 positions"):
        draw_pattern((128, 96), pattern="spiral", acceleration=40)
    with pytest.raises(PatternError, match="turns = 0 is not a number above 0"):
        draw_pattern((128, 96), pattern="spiral", turns=0)
    with pytest.raises(PatternError, match="golden_order = 0 is not a whole number"):
        draw_pattern((128, 96), pattern="spokes", golden_order=0)
