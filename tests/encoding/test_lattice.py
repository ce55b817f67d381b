"""Finding the lattice of a regular pattern."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from receive import regular

from mrics.encoding import undersample
from mrics.encoding.lattice import find_lattice
from mrics.errors import AcquisitionError
from mrics.sampling.pattern import Pattern


def acquired(pattern):
    shape = pattern.grid if len(pattern.grid) == 2 else (pattern.grid[0], 6)
    return undersample(np.zeros((max(1, pattern.frames), *shape)), pattern)


@settings(max_examples=60, deadline=None)
@given(
    u=st.integers(24, 40),
    v=st.integers(24, 40),
    steps=st.tuples(st.integers(1, 4), st.integers(1, 4)),
    shift=st.integers(0, 3),
    calibration=st.sampled_from([0, 6, 7]),
    one_axis=st.booleans(),
)
def test_a_drawn_lattice_is_found_again(u, v, steps, shift, calibration, one_axis):
    grid = (u,) if one_axis else (u, v)
    steps = steps[:1] if one_axis else steps
    shift = 0 if one_axis else shift % steps[1]
    found = find_lattice(acquired(regular(grid, steps, calibration, shift)))
    bare = regular(grid, steps, 0, shift).mask
    size = (u, 1) if one_axis else (u, v)
    np.testing.assert_array_equal(found.mask(*size), bare.reshape(size))
    assert found.acceleration == np.prod(steps)


@pytest.mark.parametrize(
    ("steps", "lines", "achieved"),
    [(2, 24, 1.8286), (3, 24, 2.5347), (4, 24, 3.1220), (4, 32, 2.9091)],
)
def test_net_acceleration_of_lattice_and_calibration(steps, lines, achieved):
    # Source: P11, counted for N = 256: 140, 101, 82 and 88 lines.
    pattern = regular((256,), (steps,), lines)
    assert pattern.acceleration == pytest.approx(achieved, abs=5e-5)
    assert find_lattice(acquired(pattern)).acceleration == steps


def test_calibration_may_be_left_unstated():
    pattern = regular((48,), (3,), 12)
    found = find_lattice(acquired(Pattern(pattern.mask)))
    assert found.steps == (3, 1)


def test_shutter_corners_may_be_missing_where_allowed():
    pattern = regular((32, 32), (2, 2), 8)
    k = np.arange(32) - 16
    shutter = k[:, None] ** 2 + k[None] ** 2 <= 16**2
    cut = Pattern(pattern.mask & shutter, calibration=(8, 8), shutter=shutter)
    assert find_lattice(acquired(cut), shutter=True).steps == (2, 2)
    with pytest.raises(AcquisitionError, match="is not regular"):
        find_lattice(acquired(cut))


def test_irregular_patterns_are_refused():
    mask = np.random.default_rng(1).random(64) < 0.4
    mask[28:36] = True
    with pytest.raises(AcquisitionError, match=r"is not regular: .* first at index"):
        find_lattice(acquired(Pattern(mask, calibration=(8,))))
    frames = np.stack([regular((16,), (2,)).mask, np.roll(regular((16,), (2,)).mask, 1)])
    with pytest.raises(AcquisitionError, match="2 frames have different patterns"):
        find_lattice(acquired(Pattern(frames, frames=2)))
