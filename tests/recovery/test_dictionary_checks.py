"""Patch dictionaries against outside references: codes, bounds, learning, ridge, domain."""

import os
from dataclasses import replace

import numpy as np
import pytest
from dictionary_cases import acquired, judged, planes_of, trained_on
from sklearn.decomposition import MiniBatchDictionaryLearning, sparse_encode
from sklearn.linear_model import Ridge

from mrics.errors import RecoveryError
from mrics.recovery import recover
from mrics.recovery.dictionary import (
    check_domain,
    code,
    learn_online,
    load_dictionary,
    recover_ridge,
)
from mrics.recovery.dictionary.coding import Prepared
from mrics.recovery.dictionary.learning import _replace, start_atoms
from mrics.recovery.dictionary.patches import choose, code_and_average, lay_out
from mrics.recovery.dictionary.store import Dictionary, save_dictionary


def unit_rows(shape, seed):
    rows = np.random.default_rng(seed).standard_normal(shape)
    return rows / np.linalg.norm(rows, axis=1, keepdims=True)


@pytest.fixture(scope="module")
def head():
    """Mean-free 5 x 5 patches of two halves of open volume A: to learn from, and to judge."""
    layout = lay_out((8, 128, 96), (5, 5))
    return tuple(
        choose(planes_of("A", which).astype(np.float32), layout, 6000, 1)
        for which in (range(4, 20, 2), range(5, 21, 2))
    )


@pytest.mark.parametrize("method", ["l1", "lca"])
def test_l1_codes_are_those_of_least_angle_regression(method):
    # scikit-learn, sparse_encode(algorithm="lasso_lars"): 1/2 ||y - a D||^2 + alpha ||a||_1.
    # At rest the competitive algorithm fulfils the same optimality conditions (Rozell et al. 2008).
    atoms, patches = unit_rows((40, 20), 1), np.random.default_rng(2).standard_normal((30, 20))
    theirs = sparse_encode(patches, atoms, algorithm="lasso_lars", alpha=0.5, max_iter=1000)
    ours = code(patches, atoms, method, weight=0.5).dense(40)

    def objective(codes):
        misfit = np.square(patches - codes @ atoms).sum(axis=1) / 2
        return misfit + 0.5 * np.abs(codes).sum(axis=1)

    np.testing.assert_allclose(objective(ours), objective(theirs), rtol=1e-4)
    np.testing.assert_allclose(ours, theirs, atol=0.02)


def test_pursuit_recovers_all_codes_below_the_coherence_bound():
    # Tropp 2004, IEEE Trans. Inf. Theory 50 (bound from memory): k < (1 + 1/mu) / 2. Spikes and the
    # unitary Fourier basis of 64 samples have mu = 1/8, so k <= 4.
    fourier = np.exp(-2j * np.pi * np.outer(np.arange(64), np.arange(64)) / 64) / 8
    atoms = np.concatenate([np.eye(64), fourier])
    coherence = np.abs(np.conj(atoms) @ atoms.T - np.eye(128)).max()
    assert coherence == pytest.approx(1 / 8)
    rng = np.random.default_rng(3)
    truth = np.zeros((500, 128), complex)
    for row in truth:
        chosen = rng.choice(128, 4, replace=False)
        row[chosen] = rng.standard_normal(4) + 1j * rng.standard_normal(4)
    found = code(truth @ atoms, atoms, "omp", sparsity=4).dense(128)
    np.testing.assert_allclose(found, truth, atol=1e-9)


def test_learning_fits_as_well_as_scikit_learn_does(head):
    teach, _ = head
    ours = learn_online(teach, 64, sparsity=4, passes=3)
    reference = MiniBatchDictionaryLearning(
        64, max_iter=1, batch_size=64, transform_algorithm="omp", alpha=0.02, random_state=0
    ).fit(teach[:3000])
    theirs = reference.components_.astype(np.float32)
    theirs /= np.linalg.norm(theirs, axis=1, keepdims=True)
    left = [code(teach, atoms, "omp", sparsity=4).residual.sum() for atoms in (ours, theirs)]
    assert left[0] <= 1.02**2 * left[1]


def test_dead_and_equal_atoms_give_way_to_patches_coded_worst():
    atoms = unit_rows((6, 9), 4)
    atoms[4] = -atoms[1]
    kept = atoms.copy()
    use = np.array([3, 5, 0, 2, 2, 1])
    worst = 2.5 * unit_rows((6, 9), 5)
    assert _replace(atoms, use, worst) == 2
    np.testing.assert_allclose(atoms[[2, 4]], worst[:2] / 2.5)
    np.testing.assert_array_equal(atoms[[0, 1, 3, 5]], kept[[0, 1, 3, 5]])


def test_ridge_is_scikit_learns_and_beats_the_solution_of_minimum_norm(head):
    teach, judge = (patches.astype(float) for patches in head)
    atoms = learn_online(teach.astype(np.float32), 64, sparsity=4).astype(float)
    dense = code(teach, atoms, "omp", sparsity=4).dense(64)
    energies = np.square(dense).mean(axis=0)
    rng = np.random.default_rng(6)
    operator = rng.standard_normal((10, 25)) / 5
    sigma = 0.02 * float(np.sqrt(np.square(judge).mean()))
    measured = judge @ operator.T + sigma * rng.standard_normal((len(judge), 10))
    found = recover_ridge(measured, operator, atoms, sigma**2, energies)
    scaled = atoms * np.sqrt(energies)[:, None]
    fit = Ridge(alpha=sigma**2, fit_intercept=False, solver="svd")
    fit.fit(operator @ scaled.T, measured[:50].T)
    np.testing.assert_allclose(found[:50], fit.coef_ @ scaled, rtol=1e-6, atol=1e-9)
    least = measured @ np.linalg.pinv(operator).T
    errors = [np.linalg.norm(x - judge) / np.linalg.norm(judge) for x in (found, least)]
    assert errors[0] < 0.7 * errors[1]
    with pytest.raises(RecoveryError, match=r"weight of 0.* not above 0"):
        recover_ridge(measured, operator, atoms, 0.0)
    with pytest.raises(RecoveryError, match="do not fit"):
        recover_ridge(measured, operator[:, :4], atoms, 1.0)


def test_a_scan_of_another_kind_is_outside_the_domain():
    known = trained_on([planes_of("A", range(4, 20, 2))], patches=8000, atoms=128)
    inside = planes_of("A", [7, 11])
    noise = np.random.default_rng(7).uniform(size=(2, 128, 96))
    layout = lay_out((2, 128, 96), (5, 5))
    near = check_domain(known, inside.astype(np.complex64), layout)
    assert not near.outside.any()
    far = check_domain(known, np.stack([inside[0], noise[1]]).astype(np.complex64), layout)
    assert far.outside.tolist() == [False, True]
    assert "outside its domain on 1 of 2 planes" in far.sentence
    assert far.map[1].max() > 1.0


def test_a_real_recovery_of_an_open_slice_beats_wavelet_and_variation():
    # A fixed tenth of the table in tests/campaigns: volume E, on which no setting was chosen.
    planes = planes_of("E", [1])
    data = acquired(planes, "2-D R 6")
    learned = judged(data, planes, "dictionary")
    for other, settings in (("wavelet", {"shift": "full"}), ("variation", {})):
        linear = judged(data, planes, other, **settings)
        assert learned["psnr"] > linear["psnr"] + 0.5
        assert learned["hfen"] < linear["hfen"]


@pytest.mark.parametrize("border", ["wrap", "reflect"])
@pytest.mark.parametrize("kind", [np.float64, np.complex128])
def test_averaged_patches_are_those_of_the_codes(kind, border):
    rng = np.random.default_rng(10)
    stack = rng.standard_normal((2, 9, 11)) + 1j * rng.standard_normal((2, 9, 11))
    atoms = unit_rows((24, 12), 11).astype(kind)
    if kind is np.complex128:
        atoms = (atoms + 1j * unit_rows((24, 12), 12)) / 2**0.5
    layout = lay_out((2, 9, 11), (3, 4), border=border)
    found = code_and_average(stack, Prepared(atoms), layout, 4, 2.0)
    ends = ((0, 0), (0, 2), (0, 3)) if border == "wrap" else ((0, 0), (2, 2), (3, 3))
    wide = np.pad(stack, ends, mode="wrap" if border == "wrap" else "symmetric")
    total = np.zeros(wide.shape, complex)
    weight = np.zeros(wide.shape, complex)
    used = 0
    for plane in range(2):
        for u in range(wide.shape[1] - 2):
            for v in range(wide.shape[2] - 3):
                at = (plane, slice(u, u + 3), slice(v, v + 4))
                patch = wide[at].reshape(1, -1)
                mean = patch.mean()
                parts = [patch - mean]
                if kind is np.float64:
                    parts = [(patch - mean).real, (patch - mean).imag]
                for part, turn in zip(parts, (1, 1j), strict=False):
                    codes = code(part, atoms, "omp", sparsity=4, error=2.0)
                    share = 1 / (1 + codes.counts[0])
                    own = (
                        mean if kind is np.complex128 else (mean.imag if turn == 1j else mean.real)
                    )
                    total[at] += turn * share * (codes.synthesise(atoms) + own).reshape(3, 4)
                    weight[at] += (1 + 1j if kind is np.complex128 else turn) * share
                    used += codes.counts[0]
    if border == "wrap":
        for array in (total, weight):
            array[:, :2] += array[:, 9:]
            array[:, :, :3] += array[:, :, 11:]
        inside = (slice(None), slice(9), slice(11))
    else:
        inside = (slice(None), slice(2, 11), slice(3, 14))
    expected = total.real / weight.real + 1j * total.imag / weight.imag
    np.testing.assert_allclose(found.image, expected[inside], atol=1e-9)
    assert found.use.sum() == used


def test_too_few_or_constant_patches_are_refused():
    with pytest.raises(RecoveryError, match="9 patches cannot teach 10 atoms"):
        start_atoms(unit_rows((9, 4), 8), 10, 0)
    with pytest.raises(RecoveryError, match="None of the 9 patches holds anything but a constant"):
        start_atoms(np.zeros((9, 4)), 5, 0)
    with pytest.raises(RecoveryError, match=r"A patch of 9 samples is larger .* of 8 along u"):
        lay_out((1, 8, 20), (9, 9))


def test_recovery_of_a_constant_image_is_refused(points):
    flat = np.zeros_like(points.kspace)
    flat[:, :, 20, 24] = 40.0
    with pytest.raises(RecoveryError, match="anything but a constant"):
        recover(replace(points, kspace=flat, sigma_added=0.0), "dictionary", iterations=1)


class Runs:
    """Pickled, this would leave a file behind when it is loaded."""

    def __init__(self, path):
        self.path = path

    def __reduce__(self):
        return os.mkdir, (str(self.path),)


def test_foreign_files_are_refused_and_never_unpickled(tmp_path):
    atoms = unit_rows((10, 16), 9).astype(np.float32)
    path = save_dictionary(Dictionary(atoms, (4, 4)), tmp_path / "d.npz")
    held = dict(np.load(path))
    np.savez(tmp_path / "new.npz", **{**held, "schema": np.array(99)})
    with pytest.raises(RecoveryError, match="of version 99, not 1"):
        load_dictionary(tmp_path / "new.npz")
    np.savez(tmp_path / "whole.npz", **{**held, "atoms": np.ones((10, 16), np.int16)})
    with pytest.raises(RecoveryError, match=r"Atoms of type int16"):
        load_dictionary(tmp_path / "whole.npz")
    with pytest.raises(RecoveryError, match="stacks 1 planes in a patch, the recovery 3"):
        load_dictionary(path, layers=3)
    trap = np.array([Runs(tmp_path / "run")], dtype=object)
    np.savez(tmp_path / "trap.npz", **{**held, "provenance": trap})
    with pytest.raises(RecoveryError, match="cannot be read"):
        load_dictionary(tmp_path / "trap.npz")
    assert not (tmp_path / "run").exists()
    (tmp_path / "text.npz").write_text("not an archive")
    with pytest.raises(RecoveryError, match="cannot be read"):
        load_dictionary(tmp_path / "text.npz")
