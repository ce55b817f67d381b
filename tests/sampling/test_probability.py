"""Inclusion probabilities: sums, bounds, feasibility."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from mrics.errors import PatternError
from mrics.sampling import draw_pattern
from mrics.sampling.grid import calibration_block
from mrics.sampling.laws import LAWS, law_density
from mrics.sampling.probability import ONE, inclusion

GRIDS = [(128,), (257,), (512,), (128, 192), (131, 129)]


@pytest.mark.parametrize("shape", GRIDS)
@pytest.mark.parametrize("law", [name for name in LAWS if name not in ("energy", "table")])
@pytest.mark.parametrize("acceleration", [1.5, 2, 3.7, 6, 12])
def test_count_is_exactly_the_rounded_request(shape, law, acceleration):
    pattern = draw_pattern(shape, law=law, acceleration=acceleration, calibration=9, seed=5)
    count = round(int(np.prod(shape)) / acceleration)
    assert pattern.mask.sum() == count
    assert pattern.settings["requested_count"] == count
    assert pattern.probability.max() <= 1
    assert pattern.probability.sum() == count  # exact: multiples of 2^-30


def test_expected_bernoulli_count_meets_a_fractional_request():
    pattern = draw_pattern((250, 190), draw="bernoulli", acceleration=3.7, calibration=24)
    assert pattern.probability.sum() == pytest.approx(250 * 190 / 3.7, abs=2.0**-30)


@given(
    values=st.lists(st.floats(0.01, 100), min_size=4, max_size=60),
    share=st.floats(0.05, 1.0),
)
@settings(max_examples=80, deadline=None)
def test_probabilities_are_the_clipped_scaled_law(values, share):
    density = np.array(values)
    count = max(1.0, share * density.size)
    quanta = inclusion(density, count)
    assert abs(quanta.sum() - count * ONE) <= 1
    assert quanta.min() >= 0
    assert quanta.max() <= ONE
    free = quanta < ONE - density.size
    if free.any():  # below the clip p / density is one number, to the rounding of p
        scale = quanta[free].sum() / density[free].sum()
        np.testing.assert_allclose(quanta[free], scale * density[free], atol=density.size + 1)
        assert (scale * density[~free] >= ONE * (1 - 1e-3)).all()


def test_power_law_has_the_published_mean():
    # mean of (1 - r)^q: 1/(q+1) in 1-D, 2/((q+1)(q+2)) over the unit disc
    # (the polynomial density of Lustig, Donoho, Pauly 2007, MRM 58; means by integration)
    line = law_density((4096,), "power", {"exponent": 3.0})
    assert line.mean() == pytest.approx(1 / 4, rel=1e-3)
    disc = law_density((1024, 1024), "power", {"exponent": 3.0}, elliptical=True)
    assert disc.sum() / (np.pi / 4 * 1024**2) == pytest.approx(0.1, rel=5e-3)


def test_inverse_square_law_falls_by_four_per_doubling():
    # P(2k)/P(k) = 1/4 outside the plateau (Krahmer & Ward 2014)
    pattern = draw_pattern((512, 512), law="inverse-square", acceleration=12, calibration=0)
    row = pattern.probability[256, 256:]
    k = np.flatnonzero(row[:128] < 1)
    np.testing.assert_allclose(row[2 * k] / row[k], 0.25, rtol=1e-6)


def test_per_axis_law_is_a_product():
    both = law_density((64, 48), "gaussian", {"width": 0.4}, per_axis=True)
    np.testing.assert_allclose(
        both,
        np.outer(
            law_density((64,), "gaussian", {"width": 0.4}),
            law_density((48,), "gaussian", {"width": 0.4}),
        ),
    )


def test_too_large_acceleration_names_the_largest_feasible():
    with pytest.raises(PatternError, match=r"alone holds 24 .* 13 .*") as caught:
        draw_pattern((256,), acceleration=20, calibration=24)
    assert "10.666" in caught.value.fix
    draw_pattern((256,), acceleration=10.666, calibration=24)


def test_too_small_acceleration_names_the_smallest_feasible():
    with pytest.raises(PatternError, match="Only 51431 positions") as caught:
        draw_pattern((256, 256), law="uniform", acceleration=1.1, elliptical=True)
    assert "1.275" in caught.value.fix
    draw_pattern((256, 256), law="uniform", acceleration=1.275, elliptical=True)


def test_an_acceleration_that_leaves_nothing_is_refused():
    with pytest.raises(PatternError, match="leaves no position of 64"):
        draw_pattern((64,), acceleration=200, calibration=0)


def test_densities_of_any_size_are_scaled():
    # a narrow gaussian underflows far out; its smallest densities are below 1e-300
    pattern = draw_pattern((64, 64), law="gaussian", width=0.02, acceleration=50, calibration=0)
    assert pattern.mask.sum() == round(64 * 64 / 50)


def test_calibration_is_always_acquired_and_central():
    block = calibration_block((256, 101), (24, 9))
    rows, columns = np.flatnonzero(block.any(1)), np.flatnonzero(block.any(0))
    assert (rows[0], rows[-1]) == (116, 139)
    assert (columns[0], columns[-1]) == (46, 54)
    pattern = draw_pattern((256, 101), calibration=(24, 9), acceleration=8)
    assert pattern.mask[block].all()
    assert pattern.calibration == (24, 9)


@pytest.mark.parametrize(
    ("settings", "message"),
    [
        ({"acceleration": 0.5}, "acceleration 0.5"),
        ({"acceleration": float("nan")}, "acceleration nan"),
        ({"calibration": 300}, "of 300 is larger than the grid's 256"),
        ({"calibration": 2.5}, "calibration size 2.5"),
        ({"exponent": -1}, "exponent = -1 is outside 0 ... 20"),
        ({"law": "gaussian", "width": 0}, "width = 0 is outside"),
        ({"exponnt": 2}, "'exponnt'. The nearest is 'exponent'"),
        ({"law": "gaussian", "exponent": 2}, "'gaussian' takes no key 'exponent'"),
        ({"law": "powr"}, "'powr' is not known. The nearest is 'power'"),
        ({"draw": "exact"}, "'exact' is not known. The nearest is 'exact-count'"),
        ({"seed": 1.5}, "seed 1.5"),
        ({"seed": -1}, "seed -1"),
        ({"elliptical": "yes"}, "elliptical = 'yes'"),
        ({"partial_fourier": 0.52}, "fraction 0.52 is outside 0.53125"),
        ({"partial_fourier": 1.2}, "fraction 1.2 is outside"),
        ({"partial_fourier": "6/8"}, "fraction '6/8'"),
    ],
)
def test_bad_settings_are_refused(settings, message):
    with pytest.raises(PatternError, match=message):
        draw_pattern((256,), **settings)


@pytest.mark.parametrize("shape", [(1,), (2.5,), (4, 4, 4), "ab", (True, 4)])
def test_bad_grids_are_refused(shape):
    with pytest.raises(PatternError, match="grid shape"):
        draw_pattern(shape)
