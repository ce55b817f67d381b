"""Field of a current loop against Biot-Savart figures and a direct sum over the wire."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import ellipe, ellipk

from mrics.encoding.loops import MU0, loop_field


@pytest.mark.parametrize(
    ("z_mm", "tesla"),
    [(0.0, 1.2566371e-5), (25.0, 8.9917629e-6), (50.0, 4.4428829e-6), (100.0, 1.1239704e-6)],
)
def test_on_the_axis(z_mm: float, tesla: float) -> None:
    """B = mu0 I a^2 / (2 (a^2 + z^2)^1.5) (Biot-Savart), a = 50 mm, 1 A."""
    radial, axial = loop_field(0.0, z_mm, 50.0)
    assert radial == 0.0
    assert axial == pytest.approx(tesla, rel=1e-7)
    exact = MU0 * 0.05**2 / (2 * (0.05**2 + (z_mm * 1e-3) ** 2) ** 1.5)
    assert axial == pytest.approx(exact, rel=1e-14)


@pytest.mark.parametrize(
    ("r_mm", "z_mm", "br", "bz"),
    [
        (30.0, 40.0, 2.5971912e-6, 4.8221156e-6),
        (50.0, 50.0, 2.2866290e-6, 1.9296648e-6),
        (100.0, 20.0, 6.7157135e-7, -7.9233707e-7),
        (20.0, 0.0, 0.0, 1.4342301e-5),
    ],
)
def test_off_the_axis(r_mm: float, z_mm: float, br: float, bz: float) -> None:
    """Simpson et al. 2001 in elliptic integrals; figures equal to direct Biot-Savart summation."""
    radial, axial = loop_field(r_mm, z_mm, 50.0)
    assert radial == pytest.approx(br, rel=1e-7, abs=1e-20)
    assert axial == pytest.approx(bz, rel=1e-7)


@pytest.mark.parametrize("point", [(1e-7, 30.0), (0.4, -70.0), (12.0, 3.0), (900.0, 700.0)])
def test_against_a_sum_over_the_wire_where_the_usual_form_cancels(
    point: tuple[float, float],
) -> None:
    """dB = mu0 I / (4 pi) dl x R / R^3, 4000 pieces: the rule converges at once (periodic)."""
    r, z = point
    a = 50.0
    angle = np.linspace(0.0, 2 * np.pi, 4000, endpoint=False)
    wire = np.stack([a * np.cos(angle), a * np.sin(angle), 0 * angle], axis=1)
    step = np.stack([-a * np.sin(angle), a * np.cos(angle), 0 * angle], axis=1) * 2 * np.pi / 4000
    away = np.array([r, 0.0, z]) - wire
    pieces = np.cross(step, away) / np.linalg.norm(away, axis=1, keepdims=True) ** 3
    total = 1e-7 * pieces.sum(axis=0) * 1e3  # lengths in mm
    radial, axial = loop_field(r, z, a)
    size = np.linalg.norm(total)
    assert axial == pytest.approx(total[2], abs=1e-9 * size)
    assert radial == pytest.approx(total[0], rel=2e-6, abs=1e-13 * size)


def test_far_field_is_a_dipole() -> None:
    axial = loop_field(0.0, 1e5, 50.0)[1]
    assert axial == pytest.approx(MU0 * 0.05**2 / (2 * 100.0**3), rel=1e-6)


def test_elliptic_integrals_take_the_parameter() -> None:
    """K and E of m = k^2 and Legendre's relation (Abramowitz & Stegun 17)."""
    for m, k_value, e_value in (
        (0.5, 1.8540746773, 1.3506438810),
        (0.25, 1.6857503548, 1.4674622093),
        (0.9, 2.5780921133, 1.1047747327),
    ):
        assert ellipk(m) == pytest.approx(k_value, abs=5e-11)
        assert ellipe(m) == pytest.approx(e_value, abs=5e-11)
        relation = ellipe(m) * ellipk(1 - m) + ellipe(1 - m) * ellipk(m) - ellipk(m) * ellipk(1 - m)
        assert relation == pytest.approx(np.pi / 2, rel=1e-14)


def test_rounded_wire_keeps_the_field_finite_and_the_far_field() -> None:
    radial, axial = loop_field([50.0, 50.0], [0.0, 1e-3], 50.0, conductor_mm=5.0)
    assert np.isfinite([radial, axial]).all()
    plain, soft = loop_field(40.0, 300.0, 50.0), loop_field(40.0, 300.0, 50.0, conductor_mm=5.0)
    assert np.allclose(plain, soft, rtol=2e-3)
