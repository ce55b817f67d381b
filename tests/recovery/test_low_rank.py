"""Low rank over frames: CVXPY's nuclear norm, one singular-value threshold, both parts found."""

from dataclasses import replace

import cvxpy
import numpy as np
import pytest

from mrics.encoding import undersample
from mrics.errors import RecoveryError
from mrics.recovery import check_settings, recover
from mrics.recovery.singular import Tiles
from mrics.sampling import draw_pattern

VARIANTS = [
    {"weight": 0.5, "block": 8, "tolerance": 1e-2},
    {"weight": 0.5, "model": "low-rank+sparse", "tolerance": 1e-2},
]


def beating(frames=6, shape=(20, 24)):
    """Frames of one place: a still part, a part that fades, and a small disc that blinks."""
    y, x = np.mgrid[-1 : 1 : shape[0] * 1j, -1 : 1 : shape[1] * 1j]
    still = (x**2 + y**2 < 0.8) * np.exp(0.5j * x)
    fading = 0.6 * ((x - 0.2) ** 2 + y**2 < 0.2)
    blink = 0.5 * ((x + 0.4) ** 2 + (y - 0.3) ** 2 < 0.03)
    times = np.arange(frames)
    return np.array(
        [still + fading * np.exp(-t / 4) + blink * np.cos(2 * np.pi * t / 3) for t in times]
    )


@pytest.fixture
def framed():
    """Two places of 10 frames, each frame with its own lines, R = 4."""
    one = beating(10, (40, 32))
    stack = np.stack([one, 0.7 * one[::-1]], 1).reshape(20, 40, 32)
    pattern = draw_pattern((40,), acceleration=4, calibration=6, seed=3, frames=10)
    return stack, undersample(stack, pattern, sigma=0.02, seed=1)


def problem(channels):
    """A tiny acquisition of 3 frames and its encoding matrices, with numpy's FFT."""
    shape = (5, 4)
    y, x = np.mgrid[-1:1:5j, -1:1:4j]
    images = beating(3, shape)
    pattern = draw_pattern(shape, acceleration=2, calibration=2, seed=1, frames=3)
    maps = np.array([np.exp(-((x - a) ** 2) + 1j * a * y) for a in (-1, 1)])[:channels]
    acquisition = undersample(
        images, pattern, sigma=0.05, seed=5, sensitivities=maps[None] if channels > 1 else None
    )
    if channels == 1:
        maps = np.ones((1, *shape))
    basis = np.eye(20).reshape(20, 1, *shape) * maps
    kspace = np.fft.fftshift(
        np.fft.fft2(np.fft.ifftshift(basis, axes=(2, 3)), norm="ortho"), axes=(2, 3)
    )
    matrices = [kspace[:, :, mask].reshape(20, -1).T for mask in pattern.mask]
    data = [
        one[:, mask].ravel() for one, mask in zip(acquisition.kspace, pattern.mask, strict=True)
    ]
    return acquisition, matrices, data


def misfit(matrices, data, unknown):
    return 0.5 * sum(
        cvxpy.sum_squares(matrix @ unknown[:, f] - samples)
        for f, (matrix, samples) in enumerate(zip(matrices, data, strict=True))
    )


def least(fit, weight, penalty):
    """Optimum of fit + weight * penalty by SCS to 1e-9 (Clarabel stops short on these cones)."""
    problem = cvxpy.Problem(cvxpy.Minimize(fit + weight * penalty))
    return problem.solve(solver=cvxpy.SCS, eps=1e-9, max_iters=200_000)


def nuclear(values):
    """Nuclear norm of a complex matrix; a real matrix twice the size has each value twice."""
    re, im = cvxpy.real(values), cvxpy.imag(values)
    return 0.5 * cvxpy.normNuc(cvxpy.bmat([[re, -im], [im, re]]))


@pytest.mark.parametrize("channels", [1, 2])
def test_local_optimum_equals_an_independent_solver(channels):
    """CVXPY's nuclear norm (SCS), blocks of 3 with smaller ones at the edges, both
    tilings."""
    acquisition, matrices, data = problem(channels)
    weight = 0.6
    unknown = cvxpy.Variable((20, 3), complex=True)
    index = np.arange(20).reshape(5, 4)
    penalty = 0
    for offset in (0, 1):
        moved = np.roll(index, (-offset, -offset), (0, 1))
        for rows in (slice(0, 3), slice(3, 5)):
            for columns in (slice(0, 3), slice(3, 4)):
                chosen = moved[rows, columns].ravel()
                scale = np.sqrt(len(chosen)) + np.sqrt(3)
                penalty += 0.5 * scale * nuclear(unknown[chosen])
    value = least(misfit(matrices, data, unknown), weight * 0.05, penalty)
    certificate = recover(
        acquisition, "low-rank", weight=weight, block=3, tolerance=3e-7, iterations=20_000
    ).certificate
    assert certificate.reached
    assert certificate.objective == pytest.approx(value, rel=1e-6)


def test_low_rank_and_sparse_optimum_equals_an_independent_solver():
    acquisition, matrices, data = problem(1)
    weight, sparse = 0.5, 1.3
    low, rest = (cvxpy.Variable((20, 3), complex=True) for _ in range(2))
    fourier = np.fft.fft(np.eye(3), norm="ortho")
    penalty = (np.sqrt(20) + np.sqrt(3)) * nuclear(low) + sparse * cvxpy.sum(
        cvxpy.abs(rest @ fourier)
    )
    value = least(misfit(matrices, data, low + rest), weight * 0.05, penalty)
    certificate = recover(
        acquisition, "low-rank", model="low-rank+sparse", weight=weight, sparse=sparse,
        tolerance=1e-8, iterations=20_000,
    ).certificate  # fmt: skip
    assert certificate.reached
    assert certificate.objective == pytest.approx(value, rel=1e-6)


def test_full_sampling_is_one_singular_value_threshold():
    """A unitary and one block: the proximal map of the nuclear norm (Cai, Candes & Shen 2010)."""
    images = beating(4, (12, 12))
    pattern = draw_pattern((12,), acceleration=1, calibration=4, frames=4)
    acquisition = undersample(images, pattern, sigma=0.05, seed=2)
    found = recover(acquisition, "low-rank", weight=1.0, block=12, tolerance=1e-9)
    noisy = recover(acquisition, "zero-filled").image.reshape(4, -1).T
    left, values, right = np.linalg.svd(noisy, full_matrices=False)
    expected = (left * np.maximum(0, values - 0.05 * (12 + 2))) @ right
    np.testing.assert_allclose(found.image.reshape(4, -1).T, expected, atol=1e-6)


@pytest.mark.parametrize("shape", [(12, 12), (10, 13)])
def test_tiles_are_taken_apart_and_put_together(shape):
    values = np.random.default_rng(0).standard_normal((3, *shape))
    tiles = Tiles(shape, 4, 3, offset=2)
    out = np.empty_like(values)
    tiles.assemble(tiles.blocks(values), out)
    np.testing.assert_array_equal(out, values)


def test_noise_alone_is_removed_at_the_stated_weight():
    rng = np.random.default_rng(0)
    noise = rng.standard_normal((6, 32, 32)) + 1j * rng.standard_normal((6, 32, 32))
    assert not Tiles((32, 32), 8, 6).shrink(noise, 1.5).any()
    assert Tiles((32, 32), 8, 6).shrink(noise, 1.0).any()


@pytest.mark.parametrize("settings", VARIANTS)
def test_frames_make_up_for_missing_lines(framed, settings):
    truth, acquisition = framed
    settings = {**settings, "tolerance": 2e-3}
    zero = np.linalg.norm(recover(acquisition, "zero-filled").image - truth)
    found = np.linalg.norm(recover(acquisition, "low-rank", **settings).image - truth)
    assert found < 0.65 * zero


def test_both_parts_are_handed_out(framed):
    _, acquisition = framed
    result = recover(acquisition, "low-rank", model="low-rank+sparse", weight=0.5)
    assert set(result.extras) == {"low_rank", "sparse"}
    for part in result.extras.values():
        assert part.shape == acquisition.shape
        assert part.any()


@pytest.mark.parametrize("settings", VARIANTS)
def test_scaling_data_and_sigma_scales_the_image(framed, settings):
    _, acquisition = framed
    factor = 3e7 * np.exp(0.7j)
    scaled = replace(
        acquisition, kspace=factor * acquisition.kspace, sigma_added=abs(factor) * 0.02
    )
    one, two = (recover(a, "low-rank", **settings).image for a in (acquisition, scaled))
    np.testing.assert_allclose(two, factor * one, rtol=0, atol=1e-9 * abs(factor) * abs(one).max())


@pytest.mark.parametrize("settings", VARIANTS)
def test_an_empty_place_is_zero_and_disturbs_nothing(framed, settings):
    _, acquisition = framed
    kspace = acquisition.kspace.astype(np.complex64)
    holed = kspace.copy()
    holed[1::2] = 0
    full, part = (
        recover(replace(acquisition, kspace=k), "low-rank", **settings).image
        for k in (kspace, holed)
    )
    assert full.dtype == np.complex64
    assert not part[1::2].any()
    np.testing.assert_array_equal(part[::2], full[::2])


def test_all_zero_acquisition_gives_zeros_and_says_so(framed):
    _, acquisition = framed
    result = recover(replace(acquisition, kspace=0 * acquisition.kspace), "low-rank")
    assert not result.image.any()
    assert "all acquired samples are zero" in result.certificate.note


def test_the_weight_chooses_itself(framed):
    truth, acquisition = framed
    chosen = recover(acquisition, "low-rank", tolerance=1e-2)
    zero = np.linalg.norm(recover(acquisition, "zero-filled").image - truth)
    assert "auto" in chosen.certificate.weight_rule
    assert np.linalg.norm(chosen.image - truth) < 0.65 * zero


def test_one_frame_is_refused(lines):
    with pytest.raises(RecoveryError, match=r"needs frames; this acquisition has 1 frame"):
        recover(lines, "low-rank")


@pytest.mark.parametrize(
    ("settings", "match"),
    [
        ({"block": 1}, r"block must be a whole number of at least 2"),
        ({"model": "lowrank"}, r"model must be one of 'local'.*got 'lowrank'"),
        ({"weight": 0}, r"weight must be a number above 0.*got 0"),
    ],
)
def test_bad_settings_are_named(settings, match):
    with pytest.raises(RecoveryError, match=match):
        check_settings("low-rank", settings)
