"""Closed-form k-space against figures from outside: formulas, quadrature, the published table."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.optimize import brentq
from scipy.special import sici

from mrics.numerics import centred_fft, centred_ifft
from mrics.phantom.ellipses import (
    Ellipse,
    Ellipsoid,
    Gaussian,
    closed_form_kspace,
    frequencies,
    positions,
    shepp_logan,
)

# Sums over the table of Shepp & Logan 1974 / Toft 1996, computed apart from this code and checked
# against a 4000 x 4000 raster to 3e-5.
SHEPP_LOGAN_SUMS = {
    (0, 0): (2.2017566919, 0.4952646048),
    (1, 0): (-0.2289571552 - 0.0014082412j, -0.0754758323 - 0.0140824115j),
    (0, 1): (-0.2162686032 + 0.0245881437j, -0.0733490636 + 0.0107630559j),
    (3, 2): (-0.0640814601 + 0.0012643191j, -0.0318698404 - 0.0012736932j),
    (-3, 2): (-0.0634396249 + 0.0015616689j, -0.0254514884 + 0.0016998044j),
}


def test_ellipse_samples_match_the_bessel_form() -> None:
    # A a b J1(2 pi K)/K (Van de Walle et al. 2000), evaluated elsewhere.
    got = Ellipse((0.69, 0.92)).transform([1.3, -0.7])
    assert got.real == pytest.approx(-0.0134226468, abs=1e-9)
    assert Ellipse((10.0, 10.0)).transform([0.05, 0.0]).real == pytest.approx(56.9230686, abs=1e-6)


def test_ellipse_area_and_first_zero() -> None:
    ellipse = Ellipse((3.0, 3.0), amplitude=2.0)
    assert ellipse.transform([0.0, 0.0]) == pytest.approx(2.0 * np.pi * 9.0, rel=1e-14)
    # First zero of J1 is 3.8317059702 (Abramowitz & Stegun table 9.5), so K = 0.609835.
    zero = brentq(lambda k: ellipse.transform([k, 0.0]).real, 0.15, 0.25, xtol=1e-13)
    assert zero * 3.0 == pytest.approx(3.8317059702 / (2 * np.pi), abs=1e-9)


def test_ellipsoid_value_zero_and_series_join() -> None:
    ball = Ellipsoid((1.0, 1.0, 1.0))
    # Koay et al. 2007; the value was checked by quadrature of 4 pi r^2 sinc(2 K r).
    assert ball.transform([0.3, 0.0, 0.0]).real == pytest.approx(2.8774087135, abs=1e-9)
    zero = brentq(lambda k: ball.transform([0, k, 0]).real, 0.6, 0.8, xtol=1e-13)
    assert zero * 2 * np.pi == pytest.approx(4.4934094579, abs=1e-8)  # first root of tan q = q
    for k in (0.0, 1e-9, 0.0079, 0.00796, 0.0081, 0.5):  # both sides of the series' border
        radial = quad(lambda r, k=k: 4 * np.pi * r**2 * np.sinc(2 * k * r), 0, 1, epsabs=1e-13)[0]
        assert ball.transform([0.0, 0.0, k]).real == pytest.approx(radial, rel=1e-11)


def test_turned_ellipsoid_keeps_volume_and_follows_its_axes() -> None:
    angle = np.deg2rad(35.0)
    c, s = np.cos(angle), np.sin(angle)
    turned = Ellipsoid((5.0, 2.0, 1.0), rotation=((c, s, 0.0), (-s, c, 0.0), (0.0, 0.0, 1.0)))
    straight = Ellipsoid((5.0, 2.0, 1.0))
    assert turned.transform([0, 0, 0]) == pytest.approx(4 / 3 * np.pi * 10.0)
    along = 0.13 * np.array([c, s, 0.0])
    assert turned.transform(along) == pytest.approx(straight.transform([0.13, 0.0, 0.0]))
    assert turned.value([4.9 * c, 4.9 * s, 0.0]) == 1.0
    assert straight.value([4.9 * c, 4.9 * s, 0.0]) == 0.0


@pytest.mark.parametrize("dimension", [1, 2, 3])
def test_gaussian_transform_against_quadrature(dimension: int) -> None:
    sd, k = 1.7, 0.11
    one, _ = quad(lambda x: np.exp(-(x**2) / (2 * sd**2)) * np.cos(2 * np.pi * k * x), -40, 40)
    rest, _ = quad(lambda x: np.exp(-(x**2) / (2 * sd**2)), -40, 40)
    got = Gaussian(sd, (0.0,) * dimension).transform([k] + [0.0] * (dimension - 1))
    assert got.real == pytest.approx(one * rest ** (dimension - 1), rel=1e-10)


@pytest.mark.parametrize("modified", [False, True])
@pytest.mark.parametrize("k", sorted(SHEPP_LOGAN_SUMS))
def test_shepp_logan_sums(k: tuple[int, int], modified: bool) -> None:
    got = sum(e.transform(np.array(k, float)) for e in shepp_logan(modified=modified))
    assert got == pytest.approx(SHEPP_LOGAN_SUMS[k][int(modified)], abs=2e-10)


@pytest.mark.parametrize("shape", [(64, 48), (63, 48), (45, 47)])
def test_grid_of_a_gaussian_is_the_projects_own_transform(shape: tuple[int, int]) -> None:
    """A Gaussian is band-limited to rounding, so its DFT and its closed form agree."""
    voxel = (0.9, 0.9)
    item = Gaussian(2.0, (3.0, -1.5), amplitude=1.0 - 0.5j)
    raster = item.value(positions(shape, voxel))
    assert np.allclose(closed_form_kspace([item], shape, voxel), centred_fft(raster), atol=2e-7)


def test_grid_steps() -> None:
    k = frequencies((8, 5), (0.5, 2.0))
    # dk = 1/FOV and kmax = 1/(2 dx) (sampling theorem).
    assert np.allclose(k[:, 0, 0], np.arange(-4, 4) / 4.0)
    assert np.allclose(k[0, :, 1], np.arange(-2, 3) / 10.0)


@pytest.mark.parametrize(("n", "expected"), [(63, 0.089528), (255, 0.089492)])
def test_gibbs_overshoot_of_a_box_seen_through_finite_k_space(n: int, expected: float) -> None:
    """Overshoot Si(pi)/pi - 1/2 = 8.949 % of the jump, whatever N (Gibbs 1899, Wilbraham 1848).

    A very long thin ellipse's chord is flat: the box is made of its closed form in 1-D instead,
    0.5 FOV wide, 32-fold zero-filled.
    """
    k = frequencies((n,), (1.0 / n,))[:, 0]
    box = 0.5 * np.sinc(0.5 * k)
    fine = np.zeros(32 * n, complex)
    start = (32 * n) // 2 - n // 2
    fine[start : start + n] = box * 32 * n / np.sqrt(32 * n)
    edge = centred_ifft(fine, axes=(0,)).real
    assert edge.max() - 1.0 == pytest.approx(expected, abs=1e-3)
    assert sici(np.pi)[0] / np.pi - 0.5 == pytest.approx(0.0894899, abs=1e-6)


def test_no_inverse_crime_disc_rings_even_when_fully_sampled() -> None:
    """Data of an ellipse cannot equal those of its raster (Guerquin-Kern et al. 2012)."""
    shape, voxel = (128, 128), (1.0, 1.0)
    disc = Ellipse((40.0, 33.0), (1.5, -2.0), 20.0)
    image = centred_ifft(closed_form_kspace([disc], shape, voxel))
    truth = disc.value(positions(shape, voxel))
    assert np.linalg.norm(image - truth) / np.linalg.norm(truth) > 0.05
    assert image.real.max() > 1.05  # overshoot
    assert abs(image.real[60:68, 60:68].mean() - 1.0) < 5e-3  # amplitude kept
