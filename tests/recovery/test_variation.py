"""Total variation: closed forms of its proximal map, CVXPY, exact recovery from few lines."""

from dataclasses import replace

import cvxpy
import numpy as np
import pytest
from invented_planes import written_out

from mrics.encoding import undersample
from mrics.phantom import shepp_logan
from mrics.phantom.ellipses import positions
from mrics.recovery import recover
from mrics.sampling import draw_pattern
from mrics.sampling.pattern import Pattern

TIGHT = {"tolerance": 1e-8, "iterations": 20_000}


def denoised(image, weight, **settings):
    """Full sampling makes the recovery the proximal map of weight * TV."""
    pattern = draw_pattern(image.shape, acceleration=1, calibration=4)
    acquisition = undersample(image[None].astype(complex), pattern)
    settings = {**TIGHT, **settings}
    return recover(
        replace(acquisition, sigma_added=1.0), "variation", weight=weight, **settings
    ).image[0]


def test_stripe_loses_two_weights_over_its_width():
    """Periodic stripe of n2 ones, n1 zeros: levels 2w/n1 and 1 - 2w/n2 (Strong & Chan 2003:
    edges stay, the mean moves by weight x edge length / size; two edges here)."""
    image = np.zeros((24, 8))
    image[5:13] = 1
    result = denoised(image, 0.3)
    np.testing.assert_allclose(result[5:13], 1 - 0.6 / 8, atol=1e-6)
    np.testing.assert_allclose(result[:5], 0.6 / 16, atol=1e-6)


def test_disc_loses_two_weights_over_its_radius():
    """Strong & Chan: the centre drops by 2 w / r; 192^2, r = 20, w = 1: .0982 on the grid."""
    y, x = np.mgrid[:192, :192] - 95.5
    image = (x**2 + y**2 <= 400).astype(float)
    result = denoised(image, 1.0, tolerance=1e-5).real
    assert 1 - result[95, 95] == pytest.approx(0.1, rel=0.03)
    assert result[2, 2] == pytest.approx(2 * np.pi * 20 / (192**2 - np.pi * 400), rel=0.03)


def test_complex_constant_phase_is_kept():
    image = np.zeros((16, 16), complex)
    image[4:9] = 2 * np.exp(0.8j)
    np.testing.assert_allclose(
        denoised(image, 0.2), denoised(np.abs(image), 0.2) * np.exp(0.8j), atol=1e-6
    )


@pytest.mark.parametrize("channels", [1, 3])
def test_optimum_equals_an_independent_solver(channels):
    """CVXPY (Clarabel) on the same objective written with numpy's FFT."""
    shape, sigma, weight = (9, 8), 0.05, 0.8
    y, x = np.mgrid[-1 : 1 : shape[0] * 1j, -1 : 1 : shape[1] * 1j]
    image = ((x**2 + y**2 < 0.6) * np.exp(1j * x))[None]
    pattern = draw_pattern(shape, acceleration=2, calibration=3, seed=1)
    maps = np.array([np.exp(-((x - a) ** 2) + 1j * a * y) for a in (-1, 0, 1)])[:channels]
    acquisition = undersample(
        image, pattern, sigma=sigma, seed=5, sensitivities=maps[None] if channels > 1 else None
    )
    if channels == 1:
        maps = np.ones((1, *shape))
    plain = np.eye(72).reshape(72, *shape)
    matrix = written_out(plain, maps, pattern.mask)
    data = acquisition.kspace[0][:, pattern.mask].ravel()
    down, right = ((np.roll(plain, -1, a) - plain).reshape(72, 72).T for a in (1, 2))
    unknown = cvxpy.Variable(72, complex=True)
    parts = [f(d @ unknown) for d in (down, right) for f in (cvxpy.real, cvxpy.imag)]
    penalty = cvxpy.sum(cvxpy.norm(cvxpy.vstack(parts), 2, axis=0))
    objective = 0.5 * cvxpy.sum_squares(matrix @ unknown - data) + weight * sigma * penalty
    value = cvxpy.Problem(cvxpy.Minimize(objective)).solve(solver=cvxpy.CLARABEL)
    certificate = recover(acquisition, "variation", weight=weight, **TIGHT).certificate
    assert certificate.reached
    assert certificate.objective == pytest.approx(value, rel=1e-6)


def radial_lines(side, count):
    """Diametral lines at equal angles, rounded to the grid, zero frequency at side // 2."""
    mask = np.zeros((side, side), bool)
    steps = np.arange(1 - side // 2, side // 2)
    for angle in np.pi * np.arange(count) / count:
        slope = np.array([np.cos(angle), np.sin(angle)])
        along = np.rint(np.outer(slope / np.abs(slope).max(), steps)).astype(int)
        mask[tuple(along + side // 2)] = True
    return mask


def test_phantom_from_22_radial_lines_is_exact():
    """Candes, Romberg & Tao 2006, doi:10.1109/TIT.2005.862083: the Shepp-Logan phantom, rastered,
    from 22 radial lines by minimal total variation. They take 512 x 512 (4 to 5 % of the samples);
    here 128 x 128 (16 %) to save time, and an error below 1e-3 counts as exact."""
    side = 128
    where = positions((side, side), (2 / side, 2 / side))
    image = sum(ellipse.value(where) for ellipse in shepp_logan()).real
    pattern = Pattern(mask=radial_lines(side, 22), calibration=(4, 4))
    assert pattern.mask.mean() < 0.17
    acquisition = undersample(image[None].astype(complex), pattern)
    # Without noise the weight refers to a floor of 1e-4 x the RMS of the samples.
    found = recover(acquisition, "variation", weight=0.05, tolerance=2e-5, iterations=1200)
    error = np.linalg.norm(found.image[0] - image) / np.linalg.norm(image)
    zero = np.linalg.norm(recover(acquisition, "zero-filled").image[0] - image)
    assert error < 1e-3
    assert zero / np.linalg.norm(image) > 0.4


@pytest.mark.parametrize("order", [1, 2])
def test_a_pattern_without_zero_frequency_gives_mean_zero(points, order):
    """Neither data nor penalty see the mean."""
    mask = points.mask.copy()
    mask[:, 20, 24] = False
    holed = replace(points, mask=mask, kspace=points.kspace * mask[:, None], calibration=(0, 0))
    found = recover(holed, "variation", weight=0.5, order=order, iterations=1000, tolerance=2e-3)
    assert found.certificate.reached
    assert np.isfinite(found.image).all()
    assert np.abs(found.image.mean((1, 2))).max() < 1e-3
