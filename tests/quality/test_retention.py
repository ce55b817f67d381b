"""Inserted features: shape, place, and what is left of them."""

from dataclasses import replace

import numpy as np
import pytest
from chains import acquire, body, coils, full, phantom
from scipy.special import j1

from mrics.errors import QualityError
from mrics.quality.chain import Chain
from mrics.quality.features import Feature, disc_transform
from mrics.quality.retention import feature_retention
from mrics.quality.sites import check_sites, choose_sites
from mrics.sampling import Pattern

MM = (2.0, 1.0, 1.0)


def test_disc_transform_has_its_published_values():
    # Van de Walle et al. 2000: disc r = 10, |k| = .05: 56.9230686; first zero 2 pi K = 3.831706.
    assert disc_transform(10.0, np.array(0.05)) == pytest.approx(56.9230686, abs=1e-6)
    assert disc_transform(1.0, np.array(0.0)) == pytest.approx(np.pi)
    assert disc_transform(1.0, np.array(3.831706 / (2 * np.pi))) == pytest.approx(0.0, abs=1e-6)
    assert j1(3.831706) == pytest.approx(0.0, abs=1e-6)


def test_sphere_transform_has_its_published_value():
    # Unit sphere, k = .3: 2.8774087135 (Koay, Sarlls, Oezarslan 2007).
    sphere = Feature("sphere", 2.0)
    zero = np.zeros(1)
    assert sphere.transform(zero, zero, np.array([0.3]))[0] == pytest.approx(2.8774087135, abs=1e-9)
    assert sphere.transform(zero, zero, zero)[0] == pytest.approx(4 / 3 * np.pi)


@pytest.mark.parametrize(
    ("feature", "wanted"),
    [
        (Feature("disc", 4.0), np.pi * 4.0),
        (Feature("sphere", 8.0), 4 / 3 * np.pi * 64.0),
        (Feature("line", 2.0, length_mm=9.0, angle_deg=30.0), 18.0),
    ],
)
def test_patches_hold_the_whole_feature(feature, wanted):
    patch = feature.patch(MM)
    cell = 2.0 if feature.shape == "sphere" else 1.0
    assert patch.sum() * cell == pytest.approx(wanted, rel=0.02)
    assert patch.shape == tuple(2 * r + 1 for r in feature.radii(MM))
    assert patch[tuple(n // 2 for n in patch.shape)] == pytest.approx(1.0, abs=0.3)


def test_full_sampling_keeps_everything():
    chain = Chain(acquire(phantom(), full((64,))), "zero-filled")
    features = [Feature("disc", s, c) for s in (2.0, 4.0) for c in (10.0, -30.0)]
    features.append(Feature("line", 1.5, 20.0, angle_deg=90.0))
    for result in feature_retention(chain, phantom(), features, MM, region=body()):
        np.testing.assert_allclose(result.retained, 1.0, atol=0.01)
        np.testing.assert_allclose(result.size_mm, result.inserted_mm, rtol=1e-6)
        assert result.displacement_mm.max() < 1e-6
    assert result.size_mm.mean() == pytest.approx(1.5, abs=0.2)


def test_channels_with_estimated_sensitivities_keep_everything_too():
    """Full sampling, sensitivities left to the chain: features come back in every channel."""
    image, maps = phantom((1, 64, 48)), coils(64, 48)
    pattern = Pattern(np.ones(64, dtype=bool), calibration=(24,))
    acquisition = acquire(image, pattern, sensitivities=maps)
    chain = Chain(replace(acquisition, sensitivities=None), "least-squares")
    given = np.abs(image) * np.sqrt((np.abs(maps[0]) ** 2).sum(axis=0))
    features = [Feature("disc", 3.0, 20.0), Feature("disc", 5.0, -30.0)]
    for result in feature_retention(chain, given, features, MM, region=body((1, 64, 48))):
        np.testing.assert_allclose(result.retained, 1.0, atol=0.05)


def test_a_disc_is_as_wide_as_it_was_made():
    chain = Chain(acquire(phantom(), full((64,))), "zero-filled")
    (result,) = feature_retention(chain, phantom(), [Feature("disc", 6.0)], MM, region=body())
    assert result.inserted_mm[0] == pytest.approx(6.0, abs=0.35)


def test_retention_grows_over_nested_patterns():
    image, sizes = phantom((1, 64, 48)), (2.0, 3.0)
    order = np.random.default_rng(2).permutation(64)
    features = [Feature("disc", size) for size in sizes]
    before = np.zeros(2)
    for count in (8, 16, 24, 40, 64):
        mask = np.zeros(64, bool)
        mask[order[:count]] = True
        chain = Chain(acquire(image, Pattern(mask)), "zero-filled")
        results = feature_retention(
            chain, image, features, MM, sites=np.array([[0, 30, 22]]), region=body((1, 64, 48))
        )
        now = np.array([one.mean for one in results])
        assert (now >= before - 1e-12).all()
        before = now
    np.testing.assert_allclose(before, 1.0)


def test_spheres_reach_over_planes():
    image = phantom((15, 48, 40))
    chain = Chain(acquire(image, full((48,))), "zero-filled")
    (result,) = feature_retention(chain, image, [Feature("sphere", 4.0)], MM, count=3)
    np.testing.assert_allclose(result.retained, 1.0, atol=0.01)


def test_undersampling_loses_small_features_first():
    chain = Chain(acquire(phantom()), "zero-filled")
    features = [Feature("disc", size) for size in (2.0, 3.0, 5.0)]
    results = feature_retention(chain, phantom(), features, MM, region=body())
    means = [one.mean for one in results]
    assert means == sorted(means)
    assert results[0].interval.low <= means[0] <= results[0].interval.high
    assert "sites of this acquisition" in results[0].interval.over
    sizes, moved = results[2].size_interval, results[2].displacement_interval
    assert sizes.low <= results[2].size_mm.mean() <= sizes.high
    assert moved.low <= results[2].displacement_mm.mean() <= moved.high


def test_displacement_of_a_shifted_feature():
    from mrics.quality.retention import _displacements

    patch = Feature("disc", 5.0).patch(MM)
    k = np.fft.fftfreq(patch.shape[1])[None, :, None]
    shifted = np.fft.ifft(np.fft.fft(patch, axis=1) * np.exp(-2j * np.pi * 0.2 * k), axis=1).real
    assert _displacements(shifted[None], patch, MM)[0] == pytest.approx(0.2, abs=0.05)


def test_sites_lie_inside_one_label_and_apart():
    labels = np.zeros((3, 40, 40), int)
    labels[:, 2:20, 2:38] = 1
    labels[:, 20:38, 2:38] = 2
    sites = choose_sites(labels, (0, 4, 4), 20, seed=3)
    assert len(sites) > 5
    for plane, u, v in sites:
        box = labels[plane, u - 4 : u + 5, v - 4 : v + 5]
        assert box.min() == box.max() > 0
    check_sites(sites, labels.shape, (0, 4, 4))
    np.testing.assert_array_equal(sites, choose_sites(labels, (0, 4, 4), 20, seed=3))
    assert set(choose_sites(labels, (0, 4, 4), 20, planes=[1])[:, 0]) == {1}


def test_bad_input():
    chain = Chain(acquire(phantom((1, 32, 32))), "zero-filled")
    image = phantom((1, 32, 32))
    disc = [Feature("disc", 3.0)]
    with pytest.raises(QualityError, match=r"region is on another grid.*\(1, 8, 8\)"):
        feature_retention(chain, image, disc, MM, region=np.ones((1, 8, 8), bool))
    with pytest.raises(QualityError, match="larger than the region"):
        feature_retention(chain, image, [Feature("disc", 60.0)], MM)
    with pytest.raises(QualityError, match=r"\(0, 15, 15\) and \(0, 15, 17\) overlap"):
        feature_retention(chain, image, disc, MM, sites=np.array([[0, 15, 15], [0, 15, 17]]))
    with pytest.raises(QualityError, match=r"feature at \(0, 1, 1\)"):
        feature_retention(chain, image, disc, MM, sites=np.array([[0, 1, 1]]))
    with pytest.raises(QualityError, match="no signal at the site"):
        feature_retention(chain, 0 * image, disc, MM, sites=np.array([[0, 15, 15]]))
    with pytest.raises(QualityError, match="'blob' is not known"):
        Feature("blob")
    with pytest.raises(QualityError, match=r"size 0\.0 mm"):
        Feature("disc", 0.0)
    with pytest.raises(QualityError, match="contrast 0 %"):
        Feature("disc", 1.0, 0.0)
