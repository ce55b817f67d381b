"""Local perturbation responses against point spread functions."""

import numpy as np
import pytest
from chains import acquire, body, coils, full, phantom

from mrics.errors import QualityError
from mrics.numerics import centred_ifft
from mrics.quality.chain import Chain
from mrics.quality.resolution import local_resolution, point_response, points
from mrics.sampling import draw_pattern


def spread(acquisition, site):
    """Point spread function of one channel at a site, from the pattern alone."""
    _, u, v = acquisition.shape
    mask = np.broadcast_to(acquisition.mask[0], (u, v)).astype(complex)
    response = centred_ifft(mask) / np.sqrt(u * v)
    return np.roll(response, (site[1] - u // 2, site[2] - v // 2), axis=(0, 1))


def test_single_site_is_the_point_spread_function():
    chain = Chain(acquire(phantom()), "zero-filled")
    for site in [(0, 30, 20), (1, 9, 40)]:
        response = point_response(chain, site)
        np.testing.assert_allclose(response[site[0]], spread(chain.acquisition, site), atol=1e-5)
        assert np.abs(response[1 - site[0]]).max() < 1e-10


def test_lattice_response_is_the_sum_of_its_sites():
    chain = Chain(acquire(phantom()), "zero-filled")
    sites = np.array([(0, 20, 12), (0, 20, 28), (0, 40, 20), (1, 33, 33)])
    values = np.array([0.1, -0.1j, 0.2, 0.1])
    change = chain.encode(points(chain.base.shape, sites, values, complex))
    response = next(chain.images([change])) - chain.base
    wanted = np.zeros_like(response)
    for site, value in zip(sites, values, strict=True):
        wanted[site[0]] += value * spread(chain.acquisition, site)
    np.testing.assert_allclose(response, wanted, atol=1e-5 * np.abs(wanted).max())


def test_full_sampling_has_the_width_of_the_sinc():
    # 1.207 voxels: full width at half maximum of sinc (computed from the definition).
    chain = Chain(acquire(phantom(), full((64,))), "zero-filled")
    result = local_resolution(chain, (0.8, 1.5), mask=body())
    np.testing.assert_allclose(result.width_mm[:, 0], 1.2067 * 0.8, rtol=1e-4)
    np.testing.assert_allclose(result.width_mm[:, 1], 1.2067 * 1.5, rtol=1e-4)
    np.testing.assert_allclose(result.height, 1.0, atol=1e-9)
    assert result.elsewhere == pytest.approx(0.0, abs=1e-9)
    assert result.lattice_leakage == pytest.approx(0.0, abs=1e-9)
    assert result.runs == 4


def test_a_low_pass_pattern_widens_one_axis():
    mask = np.zeros(64, bool)
    mask[32 - 10 : 32 + 11] = True
    from mrics.sampling import Pattern

    chain = Chain(acquire(phantom(), Pattern(mask, calibration=(21,))), "zero-filled")
    result = local_resolution(chain, (1.0, 1.0), mask=body())
    # 21 of 64 lines: the sinc is 64/21 times as wide along u.
    assert result.median_mm[0] == pytest.approx(1.2067 * 64 / 21, rel=0.03)
    assert result.median_mm[1] == pytest.approx(1.2067, rel=0.01)
    assert result.height.mean() == pytest.approx(21 / 64, rel=0.05)
    shown = result.as_maps(chain.base.shape)
    assert shown.shape == (2, *chain.base.shape)
    assert np.median(shown[0]) == pytest.approx(result.median_mm[0], rel=0.05)
    # A site shows its own width, a voxel beside it the same.
    plane, u, v = result.sites[5]
    np.testing.assert_allclose(shown[:, plane, u, v], result.width_mm[5], rtol=1e-6)
    np.testing.assert_allclose(shown[:, plane, u, v + 1], result.width_mm[5], rtol=1e-6)


def test_channels_resolve_what_one_channel_aliases():
    mask = np.zeros(64, bool)
    mask[::2] = True
    from mrics.sampling import Pattern

    held = acquire(phantom(), Pattern(mask), sensitivities=coils(64, 48))
    result = local_resolution(Chain(held, "least-squares", tolerance=1e-8), (1.0, 1.0), mask=body())
    assert result.median_mm == pytest.approx((1.2067, 1.2067), rel=0.02)
    alone = local_resolution(Chain(acquire(phantom(), Pattern(mask)), "zero-filled"), (1.0, 1.0))
    # Twofold aliasing puts half of the energy elsewhere; chance overlap of about 100 sites: 0.03.
    assert alone.elsewhere == pytest.approx(0.5, abs=0.06)
    assert result.elsewhere < 0.05


def test_lattice_leakage_is_what_other_sites_put_into_a_window():
    # Random lines: a point's response beyond its lobe is spread along u over its own column, so
    # what a window catches is known from the spread of one site.
    image = phantom((1, 96, 96))
    held = acquire(image, draw_pattern(96, law="uniform", acceleration=2, calibration=4, seed=1))
    chain = Chain(held, "zero-filled")
    result = local_resolution(chain, (1.0, 1.0), interleaves=2)
    alone = np.abs(spread(held, (0, 48, 48))) ** 2
    lobe = alone[46:51, 46:51].sum()
    stray = alone.sum() - lobe
    sites = len(result.sites) / 2
    wanted = stray * 13**2 * sites / alone.size / lobe
    assert result.lattice_leakage == pytest.approx(wanted, rel=0.25)


def test_non_linear_recoveries_say_so():
    chain = Chain(acquire(phantom((1, 48, 48))), "wavelet", iterations=20)
    result = local_resolution(chain, (1.0, 1.0), amplitude_sigma=8.0)
    assert "not linear" in result.note
    assert result.amplitude_sigma == 8.0
    again = local_resolution(chain, (1.0, 1.0), amplitude_sigma=8.0)
    np.testing.assert_array_equal(result.width_mm, again.width_mm)


def test_bad_input():
    chain = Chain(acquire(phantom((1, 32, 32))), "zero-filled")
    with pytest.raises(QualityError, match="Spacing 4, interleaves 4"):
        local_resolution(chain, (1.0, 1.0), spacing=4)
    with pytest.raises(QualityError, match="No lattice site lies in the mask"):
        local_resolution(chain, (1.0, 1.0), mask=np.zeros((1, 32, 32), bool))
