"""Second-order variation: CVXPY, slopes that stay slopes, closed forms."""

import cvxpy
import numpy as np
import pytest
from invented_planes import written_out

from mrics.encoding import undersample
from mrics.recovery import recover
from mrics.recovery.second_order import SecondOrder
from mrics.sampling import draw_pattern

TIGHT = {"order": 2, "tolerance": 1e-8, "iterations": 30_000}


def differences(shape):
    """Matrices of forward and of backward periodic differences along both axes."""
    basis = np.eye(shape[0] * shape[1]).reshape(-1, *shape)
    ahead = [(np.roll(basis, -1, a) - basis).reshape(len(basis), -1).T for a in (1, 2)]
    behind = [(basis - np.roll(basis, 1, a)).reshape(len(basis), -1).T for a in (1, 2)]
    return ahead, behind


def parts(values):
    return [cvxpy.real(values), cvxpy.imag(values)]


@pytest.mark.parametrize("channels", [1, 3])
def test_optimum_equals_an_independent_solver(channels):
    """CVXPY (Clarabel) minimises over image and field, written out with numpy's FFT."""
    shape, sigma, weight = (9, 8), 0.05, 0.8
    y, x = np.mgrid[-1 : 1 : shape[0] * 1j, -1 : 1 : shape[1] * 1j]
    image = ((x**2 + y**2 < 0.6) * (1 + x) * np.exp(1j * x))[None]
    pattern = draw_pattern(shape, acceleration=2, calibration=3, seed=1)
    maps = np.array([np.exp(-((x - a) ** 2) + 1j * a * y) for a in (-1, 0, 1)])[:channels]
    acquisition = undersample(
        image, pattern, sigma=sigma, seed=5, sensitivities=maps[None] if channels > 1 else None
    )
    if channels == 1:
        maps = np.ones((1, *shape))
    matrix = written_out(np.eye(72).reshape(72, *shape), maps, pattern.mask)
    data = acquisition.kspace[0][:, pattern.mask].ravel()
    (down, right), (back_down, back_right) = differences(shape)
    unknown, first, second = (cvxpy.Variable(72, complex=True) for _ in range(3))
    jump = parts(down @ unknown - first) + parts(right @ unknown - second)
    bend = parts(back_down @ first) + parts(back_right @ second)
    bend += parts((back_right @ first + back_down @ second) / np.sqrt(2))
    penalty = cvxpy.sum(cvxpy.norm(cvxpy.vstack(jump), 2, axis=0)) + 2 * cvxpy.sum(
        cvxpy.norm(cvxpy.vstack(bend), 2, axis=0)
    )
    objective = 0.5 * cvxpy.sum_squares(matrix @ unknown - data) + weight * sigma * penalty
    value = cvxpy.Problem(cvxpy.Minimize(objective)).solve(solver=cvxpy.CLARABEL)
    certificate = recover(acquisition, "variation", weight=weight, **TIGHT).certificate
    assert certificate.reached
    assert certificate.note == "second order"
    assert certificate.objective == pytest.approx(value, rel=1e-6)


def noisy_slope():
    """A plane of two slopes with a jump, fully sampled, with noise; slope 1/32 per sample."""
    y = np.mgrid[:64, :48][0]
    image = np.where(y < 32, y, 63 - y) / 32 + 0.8 * (abs(y - 31.5) < 12)
    pattern = draw_pattern((64, 48), acceleration=1, calibration=8)
    return image, undersample(image[None].astype(complex), pattern, sigma=0.08, seed=2)


def test_a_noisy_slope_stays_a_slope():
    """Order 1 makes steps of a slope, order 2 keeps it and the jump."""
    image, acquisition = noisy_slope()
    profile, error = {}, {}
    for order in (1, 2):
        found = recover(acquisition, "variation", weight=2.0, order=order, tolerance=1e-3).image[0]
        profile[order] = np.diff(found.real.mean(1)[2:18])
        error[order] = np.linalg.norm(found - image)
    assert np.ptp(profile[2]) < 0.6 * np.ptp(profile[1])
    np.testing.assert_allclose(profile[2], 1 / 32, atol=0.015)
    assert error[2] < 0.8 * error[1]


def test_second_order_never_costs_more(points):
    """The field w = 0 is allowed, so that the optimum is at most that of order 1."""
    first, second = (
        recover(points, "variation", weight=0.5, order=o, iterations=1000).certificate
        for o in (1, 2)
    )
    assert first.reached
    assert second.reached
    assert second.objective <= first.objective


@pytest.mark.parametrize("shape", [(8, 6), (7, 9)])
def test_symbol_is_what_the_field_leaves(shape):
    """pull and push are the optimum over the field: the symbol is min_w of the quadratic form."""
    rng = np.random.default_rng(0)
    image = rng.standard_normal(shape) + 1j * rng.standard_normal(shape)
    penalty = SecondOrder(shape, np.float64)
    penalty.set_weight(1.0, image.view(float))
    (down, right), (back_down, back_right) = differences(shape)
    size = image.size
    zero = np.zeros((size, size))
    rho_1, rho_2 = np.sqrt(penalty._rhos[:2])
    bands = np.block(
        [
            [rho_1 * down, -rho_1 * np.eye(size), zero],
            [rho_1 * right, zero, -rho_1 * np.eye(size)],
            [zero, rho_2 * back_down, zero],
            [zero, zero, rho_2 * back_right],
            [zero, rho_2 * back_right / np.sqrt(2), rho_2 * back_down / np.sqrt(2)],
        ]
    )
    left = bands[:, :size] @ image.ravel()
    field = np.linalg.lstsq(bands[:, size:], -left, rcond=None)[0]
    least = np.linalg.norm(left + bands[:, size:] @ field) ** 2
    spectrum = np.fft.fft2(image, norm="ortho")
    assert (penalty.symbol * abs(spectrum) ** 2).sum() == pytest.approx(least, rel=1e-9)
