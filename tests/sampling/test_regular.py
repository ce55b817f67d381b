"""Regular patterns and the shapes that cut the grid."""

import numpy as np
import pytest

from mrics.errors import PatternError
from mrics.sampling import check_sampling, draw_entry, draw_pattern
from mrics.sampling.grid import elliptical_shutter


@pytest.mark.parametrize(
    ("step", "calibration", "lines", "net"),
    [(2, 24, 140, 1.8286), (3, 24, 101, 2.5347), (4, 24, 82, 3.1220), (4, 32, 88, 2.9091)],
)
def test_calibration_lines_lower_the_net_acceleration(step, calibration, lines, net):
    # counted by hand: lattice through zero frequency plus the central block, N = 256
    pattern = draw_pattern((256,), pattern="equispaced", acceleration=step, calibration=calibration)
    assert pattern.mask.sum() == lines
    assert pattern.acceleration == pytest.approx(net, abs=5e-5)
    assert pattern.settings["acceleration"] == step
    assert pattern.probability is None


@pytest.mark.parametrize(("size", "inside"), [(64, 3207), (128, 12851), (256, 51431)])
def test_elliptical_shutter_counts(size, inside):
    # positions with (k/(N/2))^2 summed at most 1; the saving tends to 1 - pi/4 = 21.46 %
    shutter = elliptical_shutter((size, size))
    assert shutter.sum() == inside
    assert 1 - shutter.mean() == pytest.approx(1 - np.pi / 4, abs=0.003)


@pytest.mark.parametrize(("fraction", "lines"), [(5 / 8, 160), (6 / 8, 192), (7 / 8, 224)])
def test_partial_fourier_alone(fraction, lines):
    # f N lines with a symmetric centre of (2 f - 1) N (arithmetic)
    entry = {"pattern": "full", "partial_fourier": fraction}
    mask = draw_entry(entry, (256,)).mask
    assert mask.sum() == lines
    assert mask[256 - lines :].all()
    centre = round((2 * fraction - 1) * 256)
    assert (128 - (256 - lines)) * 2 == centre


def test_partial_fourier_bounds_random_patterns_and_the_count_stays():
    pattern = draw_pattern(
        (256, 192), partial_fourier=(0.75, 1), elliptical=True, acceleration=5, seed=1
    )
    assert pattern.mask.sum() == round(256 * 192 / 5)
    assert not pattern.mask[:64].any()
    assert not pattern.mask[~pattern.shutter].any()
    assert pattern.acceleration_in_shutter < pattern.acceleration


def test_full_sampling_is_acceleration_one():
    pattern = draw_entry({"sampling": "full"}, (64, 48))
    assert pattern.mask.all()
    assert pattern.acceleration == 1
    with pytest.raises(PatternError, match="acceleration 1, not 4"):
        draw_entry({"sampling": "full"}, (64,), 4)


def test_two_axis_lattice_needs_steps_that_multiply_to_the_acceleration():
    pattern = draw_entry({"pattern": "equispaced", "steps": [2, 2]}, (64, 48), 4)
    assert pattern.acceleration == 4
    with pytest.raises(PatternError, match="multiply to 4, not to the acceleration 6"):
        draw_entry({"pattern": "equispaced", "steps": [2, 2]}, (64, 48), 6)
    with pytest.raises(PatternError, match="not one whole number"):
        draw_entry({"pattern": "equispaced"}, (64, 48), 2.5)
    with pytest.raises(PatternError, match="step of 40 leaves fewer than two lines of 64"):
        draw_entry({"pattern": "equispaced"}, (64,), 40)


def test_entry_keys_follow_the_pattern():
    check_sampling({"name": "today", "sampling": "equispaced", "acceleration": 2})
    with pytest.raises(PatternError, match="'equispaced' takes no key 'exponent'"):
        check_sampling({"pattern": "equispaced", "exponent": 2})
    with pytest.raises(PatternError, match=r"'equispace' is not known\. The nearest"):
        check_sampling({"pattern": "equispace"})


@pytest.mark.parametrize(
    ("entry", "message"),
    [
        ({"calibration": "24"}, "calibration size '24'"),
        ({"calibration": -1}, "calibration size -1"),
        ({"partial_fourier": [0.75, 0.4]}, "fraction 0.4 is outside"),
        ({"pattern": "equispaced", "acceleration": 2.5}, "not one whole number"),
        ({"pattern": "equispaced", "acceleration": [4, 6], "steps": [2, 2]}, "multiply to 4"),
        ({"pattern": "shifted lattice", "steps": [2, 2], "shift": 0.5}, "shift 0.5 is not a whole"),
        ({"acceleration": "4"}, "acceleration '4' is not a number"),
        ({"best_of": "many"}, "best_of = 'many'"),
        ({"per_axis": 1}, "per_axis = 1 is neither"),
        ({"pattern": "spokes", "shift": 1}, "'spokes' takes no key 'shift'"),
        ({"law": "energy", "floor": 2}, "floor = 2 is outside"),
    ],
)
def test_entries_are_checked_without_a_grid(entry, message):
    with pytest.raises(PatternError, match=message):
        check_sampling(entry)


def test_sound_entries_pass():
    for entry in (
        {"name": "a", "law": "power", "exponent": 2, "draw": "poisson-disc", "best_of": 8},
        {"pattern": "shifted lattice", "steps": [2, 2], "shift": 1, "calibration": [24, 16]},
        {"pattern": "equispaced", "acceleration": [2, 3], "partial_fourier": 0.75},
        {"law": "energy", "training": ["a.nii.gz"], "acceleration": 4, "calibration": 24},
    ):
        check_sampling(entry)


def test_a_shifted_lattice_needs_two_axes():
    with pytest.raises(PatternError, match="needs a 2-D grid"):
        draw_pattern((64,), pattern="shifted lattice")


def test_an_entry_of_several_accelerations_needs_a_choice():
    with pytest.raises(PatternError, match="gives 2 accelerations where one is needed"):
        draw_entry({"law": "power", "acceleration": [2, 4]}, (64,))
