"""Unfolding: worked noise gains, agreement with least squares, aliases, refusals."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from receive import loops, regular, scene

from mrics.encoding import undersample
from mrics.encoding.coils import coils_for_scan
from mrics.encoding.lattice import Lattice, find_lattice
from mrics.errors import MricsWarning, RecoveryError
from mrics.quality.chain import Chain
from mrics.quality.noise_gain import noise_gain as replica_gain
from mrics.recovery import recover
from mrics.recovery.unfold import _Folds, noise_gain
from mrics.sampling.pattern import Pattern
from mrics.scan import Axes, body_mask, read_scan

SAMPLE = Path(__file__).parents[2] / "sample_data"


def worked(columns, covariance=None):
    """g of voxels whose sensitivity vectors are the columns, folded on one another."""
    columns = np.asarray(columns, complex)
    channels, count = columns.shape
    maps = columns.reshape(1, channels, count, 1)
    lattice = Lattice((count, 1), 0, (0, 0))
    return noise_gain(maps, lattice, covariance)[0, :, 0]


def test_no_acceleration_and_orthogonal_maps_have_gain_one():
    # Source: P2: R = 1, and orthogonal columns.
    maps, _, _ = loops(12, 10, 3)
    np.testing.assert_allclose(noise_gain(maps[None], Lattice((1, 1), 0, (0, 0))), 1.0)
    np.testing.assert_allclose(worked([[1, 1], [1, -1]]), 1.0)


@pytest.mark.parametrize("a", [0.5, 0.2, 0.9])
def test_two_coils_have_the_worked_gain(a):
    # Source: P2 (Pruessmann 1999 formula, worked): g = (1 + a^2)/(1 - a^2), 5/3 for a = .5.
    np.testing.assert_allclose(worked([[1, a], [a, 1]]), (1 + a**2) / (1 - a**2), rtol=1e-12)


@pytest.mark.parametrize(("rho", "gain"), [(0.5, 1.154701), (-0.5, 2.694301), (0.3, 1.327827)])
def test_noise_correlation_changes_the_gain_as_worked(rho, gain):
    # Source: P3.
    psi = np.array([[1, rho], [rho, 1]])
    np.testing.assert_allclose(worked([[1, 0.5], [0.5, 1]], psi), gain, atol=1e-6)


def test_complex_sensitivities_and_three_fold():
    # Source: P3, sqrt 2; P4: 2.277386, 3.510304, 2.277386.
    np.testing.assert_allclose(worked([[1, 1], [1, 1j]]), np.sqrt(2))
    three = [[1, 0.6, 0.3], [0.6, 1, 0.6], [0.3, 0.6, 1]]
    np.testing.assert_allclose(worked(three), [2.277386, 3.510304, 2.277386], atol=1e-6)


@pytest.mark.parametrize(
    ("steps", "shift", "aliases"),
    [
        ((2, 2), 0, {(0, 0), (4, 0), (0, 4), (4, 4)}),
        ((2, 2), 1, {(0, 0), (2, 4), (4, 0), (6, 4)}),
        ((1, 4), 1, {(0, 0), (2, 6), (4, 4), (6, 2)}),
    ],
)
def test_voxels_fold_where_the_reciprocal_lattice_says(steps, shift, aliases):
    # Source: P5 (Breuer 2006), N = 8.
    samples = np.roll(regular((8, 8), steps, 0, shift).mask, (-4, -4), axis=(0, 1))
    folds = _Folds(samples)
    first = folds.index[:, folds.index[0] == 0][:, 0]
    assert {divmod(int(i), 8) for i in first} == aliases


@pytest.mark.parametrize(
    ("grid", "steps", "shift"),
    [
        ((48,), (2,), 0),
        ((48,), (3,), 0),
        ((47,), (3,), 0),
        ((48, 40), (2, 2), 0),
        ((48, 40), (2, 2), 1),
        ((48, 40), (1, 4), 2),
        ((48, 40), (3, 2), 1),
    ],
)
@pytest.mark.parametrize("correlated", [False, True])
def test_a_noise_free_object_is_recovered_exactly(grid, steps, shift, correlated):
    maps, inside, images = scene(grid[0], 40, planes=2)
    psi = np.eye(8) + 0.3 * (np.eye(8, k=1) + np.eye(8, k=-1)) if correlated else None
    pattern = regular(grid, steps, 8, shift)
    data = undersample(images, pattern, sensitivities=maps[None], covariance=psi)
    result = recover(data, "unfold")
    np.testing.assert_allclose(result.image, images, atol=1e-9)
    gain = result.extras["noise_gain"]
    assert gain.shape == images.shape
    assert gain[:, inside].min() > 1 - 1e-5
    assert result.extras["noise_gain_acceleration"] == np.prod(steps)


def test_a_lattice_off_zero_frequency_is_unfolded_too():
    maps, _, images = scene(48, 40)
    moved = Pattern(np.roll(regular((48, 40), (2, 2), 0, 1).mask, (1, 0), axis=(0, 1)))
    data = undersample(images, replace(moved, calibration=(0, 0)), sensitivities=maps[None])
    assert find_lattice(data).acceleration == 4
    np.testing.assert_allclose(recover(data, "unfold").image, images, atol=1e-9)


def test_columns_and_folds_give_one_answer(monkeypatch):
    maps, _, images = scene(48, 12, planes=1)
    data = undersample(images, regular((48,), (3,)), 0.05, 3, sensitivities=maps[None])
    folded = recover(data, "unfold")
    monkeypatch.setattr(Lattice, "closes", lambda self, u, v: False)
    columns = recover(data, "unfold")
    np.testing.assert_allclose(folded.image, columns.image, atol=1e-9)
    np.testing.assert_allclose(folded.extras["noise_gain"], columns.extras["noise_gain"], rtol=1e-5)


@pytest.fixture(scope="module")
def knee():
    """Two slices of the sample phantom, complex128, with 8 simulated loops."""
    stem = "sub-a_acq-tse2d_part-{}_PDw.nii.gz"
    source = read_scan(SAMPLE / stem.format("real"), imaginary=SAMPLE / stem.format("imag"))
    axes = Axes("i", "j")
    maps = coils_for_scan(source, axes, number=8).sensitivities[8:10].astype(np.complex128)
    images = axes.to_planes(source.data)[8:10].astype(np.complex128)
    return images, maps, axes.to_planes(body_mask(source))[8:10]


@pytest.mark.parametrize("step", [2, 3])
def test_unfold_and_least_squares_agree_on_the_sample_phantom(knee, step):
    # Both minimise the same objective; the bound is 1e-6.
    images, maps, _ = knee
    pattern = regular((images.shape[1],), (step,))
    data = undersample(images[:1], pattern, sensitivities=maps[:1])
    one = recover(data, "unfold").image
    two = recover(data, "least-squares", tolerance=1e-10, iterations=2000).image
    assert np.linalg.norm(one - two) < 1e-6 * np.linalg.norm(one)


@pytest.mark.parametrize("method", ["unfold", "kernel"])
@pytest.mark.parametrize("step", [2, 3])
def test_no_alias_of_the_reference_is_left(knee, method, step):
    # Regression of the error on the reference shifted by N/R, at most 1 %.
    images, maps, _ = knee
    pattern = regular((images.shape[1],), (step,), 24)
    data = undersample(images, pattern, sensitivities=maps)
    gap = recover(data, method).image - images
    for fold in range(1, step):
        alias = np.roll(images, fold * images.shape[1] // step, axis=1)
        assert abs(np.vdot(alias, gap)) / np.vdot(alias, alias).real < 0.01


def test_analytic_gain_is_that_of_300_replicas():
    # Source: Robson 2008 (pseudo multiple replica); P4: 3/sqrt(2 (n - 1)) relative per voxel; the
    # stated bar is a median deviation under 3 %.
    maps, inside, images = scene(24, 20)
    pattern = regular((24,), (3,))
    psi = np.eye(8) + 0.3 * (np.eye(8, k=1) + np.eye(8, k=-1))
    data = undersample(images, pattern, 0.02, 3, sensitivities=maps[None], covariance=psi)
    analytic = recover(data, "unfold").extras["noise_gain"]
    measured = replica_gain(Chain(data, "unfold"), 300, seed=5)
    assert measured.acceleration == 3
    apart = np.abs(measured.gain / analytic - 1)[:, inside]
    assert np.median(apart) < 0.03
    assert apart.max() < 5 / np.sqrt(4 * 299)


def test_snr_falls_by_gain_and_root_acceleration():
    # Source: N9 (Pruessmann 1999): SNR_acc = SNR_full/(g sqrt R).
    maps, _, images = scene(24, 20, planes=1)
    zero = np.zeros((200, 24, 20))
    full = undersample(zero, regular((24,), (1,)), 1.0, 1, sensitivities=maps[None])
    fast = undersample(zero, regular((24,), (2,)), 1.0, 2, sensitivities=maps[None])
    slow_image, fast_image = recover(full, "unfold").image, recover(fast, "unfold")
    gain = fast_image.extras["noise_gain"][0].mean()
    ratio = fast_image.image.real.std() / slow_image.real.std()
    assert ratio == pytest.approx(gain * np.sqrt(2), rel=0.02)
    del images


def test_more_voxels_than_channels_are_refused():
    maps, inside, images = scene(48, 40, channels=3)
    data = undersample(images, regular((48,), (4,)), sensitivities=maps[None])
    with pytest.raises(RecoveryError, match="4 voxels inside the object fold together, more than"):
        recover(data, "unfold")
    # Where the maps say that only two of the folded voxels hold signal, three channels suffice.
    masked = np.where(np.abs(np.arange(48) - 24)[:, None] < 12, maps, 0)
    inner = images * (np.abs(np.arange(48) - 24)[:, None] < 12)
    data = undersample(inner, regular((48,), (4,)), sensitivities=masked[None])
    np.testing.assert_allclose(recover(data, "unfold").image, inner, atol=1e-9)
    single = undersample(images, regular((48,), (2,)))
    with pytest.raises(RecoveryError, match="more than the 1 channel"):
        recover(single, "unfold")
    odd = undersample(images[:, :47], regular((47,), (4,)), sensitivities=maps[None, :2, :47])
    with pytest.raises(RecoveryError, match=r"47 voxels of a column .* more than its 22 equations"):
        recover(odd, "unfold")
    del inside


def test_ill_conditioned_unfolding_warns():
    maps, _, images = scene(24, 20, channels=2)
    flat = np.ones_like(maps)
    flat[1] = 1 + 1e-6 * np.arange(24)[:, None]
    data = undersample(images, regular((24,), (2,)), 0.1, 1, sensitivities=flat[None])
    with pytest.warns(MricsWarning, match="ill-conditioned: condition number up to"):
        result = recover(data, "unfold")
    assert "condition number" in result.certificate.note


def test_irregular_and_unclosed_patterns_are_refused():
    maps, _, images = scene(32, 30)
    mask = np.random.default_rng(1).random(32) < 0.5
    data = undersample(images, Pattern(mask), sensitivities=maps[None])
    with pytest.raises(RecoveryError, match="not regular"):
        recover(data, "unfold")
    data = undersample(images, regular((32, 30), (3, 2), 0, 1), sensitivities=maps[None])
    with pytest.raises(RecoveryError, match=r"does not close on a grid of 32 x 30"):
        recover(data, "unfold")
