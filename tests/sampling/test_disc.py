"""Poisson-disc draws: exact count, the pair rule over all pairs, the density they keep."""

import re

import numpy as np
import pytest
from scipy.spatial import cKDTree
from scipy.spatial.distance import pdist, squareform
from scipy.stats import qmc

from mrics.errors import PatternError
from mrics.sampling import draw_pattern, radial_profile
from mrics.sampling.disc import disc_conflicts
from mrics.sampling.grid import calibration_block

SHAPE = (128, 96)


def disc(acceleration, seed=0, shape=SHAPE, **settings):
    return draw_pattern(
        shape,
        draw="poisson-disc",
        acceleration=acceleration,
        seed=seed,
        **{"calibration": 16, **settings},
    )


@pytest.mark.parametrize("acceleration", [3, 4, 5.5, 8, 12])
@pytest.mark.parametrize("settings", [{}, {"elliptical": True}, {"law": "uniform"}])
def test_count_is_exact_and_no_pair_is_too_close(acceleration, settings):
    pattern = disc(acceleration, **settings)
    assert pattern.mask.sum() == round(np.prod(SHAPE) / acceleration)
    free = pattern.mask & ~calibration_block(SHAPE, pattern.calibration)
    at = np.argwhere(free)
    r = pattern.settings["disc_c"] / np.sqrt(pattern.probability[free])
    distance = squareform(pdist(at))
    np.fill_diagonal(distance, np.inf)
    assert (distance >= np.minimum(r[:, None], r[None, :]) * (1 - 1e-12)).all()
    assert r.max() > 1, "the rule forbids nothing"


def test_certain_positions_are_taken():
    pattern = disc(3, elliptical=True)
    assert (pattern.probability == 1).sum() > 16 * 16
    assert pattern.mask[pattern.probability == 1].all()
    assert pattern.settings["disc_c"] <= 1


def test_conflicts_are_counted():
    pattern = disc(8)
    block = calibration_block(SHAPE, pattern.calibration)
    c = pattern.settings["disc_c"]
    assert disc_conflicts(pattern.mask, pattern.probability, block, c) == 0
    worse = pattern.mask.copy()
    at = np.argwhere(pattern.mask & ~block & (pattern.probability < 0.1))[0]
    worse[at[0], at[1] + 1] = True
    assert disc_conflicts(worse, pattern.probability, block, c) > 0
    # all pairs, one by one
    larger = 1.5 * c
    free = np.argwhere(pattern.mask & ~block)
    r = larger / np.sqrt(pattern.probability[pattern.mask & ~block])
    broken = pdist(free) < np.minimum(r[:, None], r[None, :])[np.triu_indices(len(r), 1)]
    assert disc_conflicts(pattern.mask, pattern.probability, block, larger) == broken.sum()


@pytest.mark.parametrize(
    "settings",
    [
        {"acceleration": 4},
        {"acceleration": 8, "exponent": 1.5},
        {"acceleration": 6, "law": "gaussian", "elliptical": True},
        {"acceleration": 6, "law": "inverse-square"},
        {"acceleration": 8, "law": "uniform"},
    ],
)
def test_radial_profile_follows_the_law(settings):
    # within 10 % wherever a ring of a twelfth of the radius holds 1 % of the positions
    shape = (160, 128)
    patterns = [disc(shape=shape, seed=s, **settings) for s in range(15)]
    profile = radial_profile(patterns)
    assert (profile.expected >= 0.01 * profile.expected.sum()).sum() >= 7
    assert profile.deviation() < 0.1


def test_spacing_is_that_of_a_reference_poisson_disc():
    # scipy.stats.qmc.PoissonDisk at about as many points on the same area: random filling jams at
    # 0.6965 A/r^2 points (random sequential adsorption), which it comes near. Distances in units of
    # the mean spacing. The grid lets them be only square roots of whole numbers, hence 15 %.
    side = 128
    pattern = disc(8, shape=(side, side), law="uniform", calibration=0)
    ours = np.argwhere(pattern.mask) / side
    radius_of_jam = np.sqrt(0.6965 / len(ours))
    reference = qmc.PoissonDisk(2, radius=radius_of_jam, rng=np.random.default_rng(0)).fill_space()
    assert 0.8 * len(ours) < len(reference) <= len(ours)

    def nearest(at):
        return cKDTree(at).query(at, k=2)[0][:, 1] * np.sqrt(len(at))

    assert nearest(ours).min() >= 0.85 * nearest(reference).min()
    assert nearest(ours).mean() == pytest.approx(nearest(reference).mean(), rel=0.15)
    random = draw_pattern((side, side), law="uniform", calibration=0, acceleration=8)
    assert nearest(np.argwhere(random.mask) / side).min() < 0.5 * nearest(reference).min()


def test_denser_than_any_distance_allows_names_the_smallest_feasible():
    # Random filling of a square grid with no two neighbours jams at 0.3641 of the positions
    # (random sequential adsorption; Evans 1993, Rev Mod Phys 65:1281, value from memory): 2.746
    with pytest.raises(
        PatternError, match=r"random positions .* so dense that no distance"
    ) as caught:
        disc(1.8, law="uniform", calibration=0)
    least = float(re.search(r"is about ([\d.]+)", caught.value.fix)[1])
    assert 2.6 < least < 2.85
    disc(1.02 * least, law="uniform", calibration=0)


def test_one_dimensional_grids_are_refused():
    with pytest.raises(PatternError, match="needs a 2-D grid"):
        draw_pattern((256,), draw="poisson-disc")
