"""Simulated receive arrays: geometry, smoothness of the splines, noise covariance, refusals."""

from __future__ import annotations

import pickle
from typing import Any

import numpy as np
import pytest

from mrics.encoding.coils import coils_for_scan, simulate_coils
from mrics.encoding.loops import loop_field
from mrics.errors import AcquisitionError
from mrics.scan.volume import Axes, Scan

GRID = ((20, 48, 40), (4.0, 3.0, 3.5))


def test_splined_field_is_exact_to_a_thousandth_everywhere() -> None:
    coils = simulate_coils((30, 128, 96), (3.0, 1.5, 2.0), standoff_mm=15.0)
    axes = [np.linspace(-0.5, 0.499, n) * extent for n, extent in ((7, 90), (41, 192), (37, 192))]
    points = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1)
    exact, splined = coils.field_at(points), coils.on_grid(*axes)
    rss = np.sqrt((np.abs(exact) ** 2).sum(axis=0))
    assert (np.abs(exact - splined) / rss).max() < 1e-3
    inside = (points[..., 1] / 96) ** 2 + (points[..., 2] / 96) ** 2 < 1
    assert (np.abs(exact - splined) / rss)[:, inside].max() < 1e-4


def test_one_loop_gives_its_own_closed_form_field() -> None:
    """On the axis of a loop that looks along u, with the bore along plane: B1- = Bu / 2."""
    coils = simulate_coils(*GRID, number=1, radius_mm=50.0)
    centre, normal = coils.centres_mm[0], coils.normals[0]
    assert np.allclose(normal, [0, -1, 0], atol=1e-12)
    points = centre + np.array([[30.0], [70.0]]) * normal
    got = coils.field_at(points)[0]
    near, far = loop_field(0.0, [30.0, 70.0], 50.0, conductor_mm=10.0)[1]
    assert got[0] / got[1] == pytest.approx(near / far, rel=1e-12)
    assert np.allclose(got.imag, 0.0, atol=1e-12)


def test_field_turns_with_the_array() -> None:
    """A quarter turn of four equal loops about the bore passes the field on, turned by 90 deg."""
    coils = simulate_coils((8, 40, 40), (5.0, 4.0, 4.0), number=4)
    point = np.array([7.0, 31.0, -12.0])
    turned = np.array([7.0, 12.0, 31.0])  # (u, v) -> (-v, u)
    before, after = coils.field_at(point), coils.field_at(turned)
    assert np.allclose(np.roll(before, 1) * -1j, after, atol=1e-9)


@pytest.mark.parametrize("bore", [0, 1, 2])
def test_loops_stand_around_the_bore_and_look_inwards(bore: int) -> None:
    coils = simulate_coils(*GRID, number=9, rows=2, bore=bore, standoff_mm=25.0)
    extent = np.array([n * d for n, d in zip(*GRID, strict=True)])
    across = [axis for axis in range(3) if axis != bore]
    half = extent[across] / 2 + 25.0
    assert np.allclose(((coils.centres_mm[:, across] / half) ** 2).sum(axis=1), 1.0)
    assert np.allclose(np.linalg.norm(coils.normals, axis=1), 1.0)
    assert np.all((coils.centres_mm * coils.normals)[:, across].sum(axis=1) < 0)
    assert sorted(np.unique(np.round(coils.centres_mm[:, bore], 6), return_counts=True)[1]) == [
        4,
        5,
    ]


def test_dome_is_closed_at_its_pole() -> None:
    coils = simulate_coils(*GRID, number=12, form="dome")
    assert coils.centres_mm[:, 0].min() > 0
    assert coils.centres_mm[:, 0].max() > 0.9 * (20 * 4.0 / 2 + 30.0)
    assert np.linalg.svd(coils.field_at(np.zeros((1, 3))))[1][0] == pytest.approx(1.0)


def test_maps_have_unit_norm_and_read_like_an_array() -> None:
    coils = simulate_coils(*GRID, number=8, correlation=0.3)
    maps = coils.sensitivities
    whole = np.asarray(maps)
    assert whole.shape == maps.shape == (20, 8, 48, 40)
    assert whole.dtype == np.complex64
    assert maps.nbytes == whole.nbytes
    assert len(maps) == 20
    weighted = np.einsum("pcuv,cd,pduv->puv", whole.conj(), np.linalg.inv(coils.covariance), whole)
    assert np.allclose(weighted, 1.0, atol=1e-5)
    assert np.allclose(maps[3:5], whole[3:5])
    assert np.allclose(maps[-1], whole[-1])
    assert np.allclose(maps[[2, 7]], whole[[2, 7]])
    assert np.allclose(maps[:, 2:4], whole[:, 2:4])
    assert np.allclose(maps[4, 1], whole[4, 1])
    assert np.allclose(pickle.loads(pickle.dumps(coils)).sensitivities[6], whole[6])


def test_maps_are_the_field_divided_by_its_norm() -> None:
    coils = simulate_coils((9, 24, 25), (5.0, 5.0, 5.0), number=6)
    axes = [(np.arange(n) - n // 2) * 5.0 for n in (9, 24, 25)]
    exact = coils.field_at(np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1))
    exact /= np.sqrt((np.abs(exact) ** 2).sum(axis=0))
    assert np.allclose(coils.sensitivities[:].transpose(1, 0, 2, 3), exact, atol=2e-3)


def test_sensitivity_is_strongest_at_its_own_loop() -> None:
    coils = simulate_coils(*GRID, number=8)
    middle = np.abs(coils.sensitivities[10])
    for channel in range(8):
        u, v = np.unravel_index(np.argmax(middle[channel]), middle.shape[1:])
        place = np.array([(u - 24) * 3.0, (v - 20) * 3.5])
        assert np.dot(place, coils.centres_mm[channel, 1:]) > 0


def test_covariance_joins_nearest_neighbours_only() -> None:
    psi = simulate_coils(*GRID, number=8, correlation=0.25).covariance
    assert np.allclose(np.diag(psi), 1.0)
    assert np.allclose(psi, psi.T)
    ring = np.eye(8) + 0.25 * (np.roll(np.eye(8), 1, axis=0) + np.roll(np.eye(8), -1, axis=0))
    assert np.allclose(psi, ring)
    # Circulant: eigenvalues 1 + 2 rho cos(2 pi n / 8).
    eigenvalues = 1 + 0.5 * np.cos(2 * np.pi * np.arange(8) / 8)
    assert np.allclose(np.linalg.eigvalsh(psi), np.sort(eigenvalues))


@pytest.mark.parametrize(
    ("affine_rows", "expected"),
    [
        (np.diag([1.0, 1.0, 2.0]), 2),  # axial slices: k along the bore
        (np.array([[0, 0, 2.0], [0, 1.0, 0], [1.0, 0, 0]]), 0),  # sagittal: i along the bore
    ],
)
def test_bore_follows_the_affine(affine_rows: np.ndarray, expected: int) -> None:
    affine = np.eye(4)
    affine[:3, :3] = affine_rows
    sizes = tuple(float(v) for v in np.linalg.norm(affine_rows, axis=0))
    scan = Scan(np.zeros((30, 20, 10), np.complex64), affine, sizes)
    axes = Axes("i", "j", "k")
    coils = coils_for_scan(scan, axes, number=4)
    order = [axes.plane, axes.u, axes.v]
    assert coils.bore == order.index("ijk"[expected])
    assert coils.shape == (30, 4, 20, 10)
    two_d = coils_for_scan(scan, Axes("i", "j"), number=4)
    assert two_d.shape == (10, 4, 20, 30)
    assert two_d.voxel_mm == (sizes[2], sizes[1], sizes[0])


@pytest.mark.parametrize(
    ("settings", "match"),
    [
        ({"number": 0}, "number 0"),
        ({"rows": 9}, "rows 9"),
        ({"rows": 2, "form": "dome"}, "rows 2 on a dome"),
        ({"radius_mm": -1.0}, "radius_mm -1"),
        ({"radius_mm": float("nan")}, "radius_mm nan"),
        ({"standoff_mm": -3.0}, "standoff_mm -3"),
        ({"correlation": 1.0}, "correlation 1.0"),
        ({"correlation": 0.5}, r"(?s)correlation of 0.5.*not positive definite.*less than 0.5"),
        ({"form": "flat"}, "form 'flat'"),
        ({"bore": 3}, "bore 3"),
    ],
)
def test_bad_settings_are_refused(settings: dict[str, Any], match: str) -> None:
    with pytest.raises(AcquisitionError, match=match):
        simulate_coils(*GRID, **settings)


@pytest.mark.parametrize(("shape", "voxel"), [((4, 4), (1, 1, 1)), ((4, 4, 4), (1, 1, 0))])
def test_bad_grid_is_refused(shape: tuple[int, ...], voxel: tuple[float, ...]) -> None:
    with pytest.raises(AcquisitionError, match=r"cannot be simulated with (shape|voxel_mm)"):
        simulate_coils(shape, voxel)


def test_points_far_outside_are_refused() -> None:
    coils = simulate_coils(*GRID)
    with pytest.raises(AcquisitionError, match="outside the array's grid"):
        coils.on_grid(np.array([0.0]), np.array([400.0]), np.array([0.0]))


def test_note_names_the_array() -> None:
    note = simulate_coils(*GRID, number=8, rows=2, correlation=0.1).note
    assert note.startswith("sensitivities simulated: 8 loops")
    assert "2 rows" in note
