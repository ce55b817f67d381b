"""Patch dictionaries: coding, learning, files, recovery."""

from dataclasses import replace

import numpy as np
import pytest
import scipy.fft
from sklearn.linear_model import orthogonal_mp_gram

from mrics.errors import RecoveryError
from mrics.recovery import recover
from mrics.recovery.dictionary import (
    Dictionary,
    code,
    fixed_atoms,
    learn_ksvd,
    learn_online,
    load_dictionary,
    save_dictionary,
)
from mrics.recovery.dictionary.learning import sweep


def unit_rows(shape, seed, complex_values=False):
    rng = np.random.default_rng(seed)
    rows = rng.standard_normal(shape)
    if complex_values:
        rows = rows + 1j * rng.standard_normal(shape)
    return rows / np.linalg.norm(rows, axis=1, keepdims=True)


def planted(atoms, patches, sparsity, seed):
    """Patches of exactly ``sparsity`` atoms each."""
    rng = np.random.default_rng(seed)
    out = np.zeros((patches, atoms.shape[1]), atoms.dtype)
    for row in out:
        chosen = rng.choice(len(atoms), sparsity, replace=False)
        row += (rng.choice([-1, 1], sparsity) * rng.uniform(0.5, 1.5, sparsity)) @ atoms[chosen]
    return out


def test_pursuit_chooses_as_scikit_learn_does():
    atoms = unit_rows((128, 64), 1)
    patches = np.random.default_rng(2).standard_normal((300, 64))
    codes = code(patches, atoms, "omp", sparsity=6)
    gram, products = atoms @ atoms.T, atoms @ patches.T
    theirs = orthogonal_mp_gram(gram, products, n_nonzero_coefs=6).T
    np.testing.assert_allclose(codes.dense(128), theirs, atol=1e-8)
    left = np.sum((patches - codes.synthesise(atoms)) ** 2, axis=1)
    np.testing.assert_allclose(codes.residual, left, rtol=1e-8)


def test_pursuit_stops_at_the_error_asked_for():
    atoms = unit_rows((128, 64), 1, complex_values=True)
    rng = np.random.default_rng(3)
    patches = rng.standard_normal((200, 64)) + 1j * rng.standard_normal((200, 64))
    codes = code(patches, atoms, "omp", error=30.0)
    assert (codes.residual <= 30.0 * (1 + 1e-9)).all()
    fewer = code(patches, atoms, "omp", sparsity=int(codes.counts.max()) - 1, error=30.0)
    assert (fewer.residual.max()) > 30.0


# Worked by hand from the 2 x 2 Gram system: atoms (1, 0) and (1/2, sqrt(3)/2), y = (2, 0.4/sqrt 3).
@pytest.mark.parametrize("method", ["l1", "lca"])
@pytest.mark.parametrize(("weight", "solution"), [(0.3, (5 / 3, 1 / 15)), (0.5, (1.5, 0.0))])
def test_l1_codes_worked_by_hand(method, weight, solution):
    atoms = np.array([[1.0, 0.0], [0.5, 0.75**0.5]])
    codes = code(np.array([[2.0, 0.4 / 3**0.5]]), atoms, method, weight=weight)
    np.testing.assert_allclose(codes.dense(2)[0], solution, atol=2e-3)


def test_a_planted_dictionary_is_found_by_k_svd():
    # Aharon, Elad, Bruckstein 2006: most atoms recovered, |inner product| above 0.99.
    truth = unit_rows((30, 16), 4)
    patches = planted(truth, 1500, 3, 5)
    atoms, history = learn_ksvd(patches, 30, sparsity=3, rounds=30, seed=1)
    match = np.abs(truth @ atoms.T).max(axis=1)
    assert np.mean(match > 0.99) > 0.7
    assert history[-1] < history[0]


def test_an_atom_sweep_never_raises_the_residual():
    # Rank-one updates by SVD are the best at fixed support.
    patches = np.random.default_rng(6).standard_normal((400, 16))
    atoms = unit_rows((24, 16), 7)
    dense = code(patches, atoms, "omp", sparsity=3).dense(24)
    before = np.linalg.norm(patches - dense @ atoms)
    for _ in range(3):
        after = np.linalg.norm(sweep(patches, atoms, dense))
        assert after <= before * (1 + 1e-12)
        before = after
    np.testing.assert_allclose(np.linalg.norm(atoms, axis=1), 1.0)


def test_online_learning_fits_and_repeats_itself():
    truth = unit_rows((40, 16), 8)
    patches = planted(truth, 6000, 3, 9).astype(np.float32)
    one = learn_online(patches, 40, sparsity=3, passes=12, seed=2)
    two = learn_online(patches, 40, sparsity=3, passes=12, seed=2)
    np.testing.assert_array_equal(one, two)
    learned = code(patches, one, "omp", sparsity=3).residual.sum()
    random = code(patches, unit_rows((40, 16), 10).astype(np.float32), "omp", sparsity=3)
    assert learned < 0.3 * random.residual.sum()


def test_the_square_dct_is_scipys():
    atoms = fixed_atoms("dct", (8, 8), 64)
    basis = scipy.fft.idctn(np.eye(64).reshape(64, 8, 8), axes=(1, 2), norm="ortho")
    overlap = np.abs(atoms @ basis.reshape(64, 64).T)
    # Every DCT-II function but the constant, whose mean is kept apart.
    np.testing.assert_allclose(np.sort(overlap.max(axis=0)), [0.0, *[1.0] * 63], atol=1e-8)


def test_files_round_trip_and_strangers_are_refused(tmp_path):
    atoms = unit_rows((10, 16), 11)
    held = Dictionary(atoms, (4, 4), provenance={"scans": [{"sha256": "ab"}]})
    path = save_dictionary(held, tmp_path / "d.npz")
    again = load_dictionary(path)
    np.testing.assert_array_equal(again.atoms, atoms)
    assert "trained on 1 of the test scans" in again.trained_on(["ab", "cd"])
    with pytest.raises(RecoveryError, match=r"patches of \(4, 4\), the recovery asks \(8, 8\)"):
        load_dictionary(path, patch=(8, 8))
    with pytest.raises(RecoveryError, match=r"real atoms .* asks complex"):
        load_dictionary(path, kind="complex")
    np.savez(tmp_path / "other.npz", atoms=atoms)
    with pytest.raises(RecoveryError, match="not a dictionary of mrics"):
        load_dictionary(tmp_path / "other.npz")
    np.savez(tmp_path / "pickled.npz", kind=np.array([{"a": 1}], dtype=object))
    with pytest.raises(RecoveryError, match="cannot be read"):
        load_dictionary(tmp_path / "pickled.npz")
    with pytest.raises(RecoveryError, match="no such dictionary"):
        load_dictionary(tmp_path / "none.npz")
    with pytest.raises(RecoveryError, match="no fixed dictionary 'sines'"):
        fixed_atoms("sines", (8, 8))


def error(image, reference):
    return np.linalg.norm(image - reference) / np.linalg.norm(reference)


@pytest.mark.parametrize(
    ("source", "patch"), [("adaptive", 6), ("dct", 6), ("wavelets", 5), ("union", 8)]
)
def test_recovery_beats_zero_filled_and_repeats_itself(planes, points, source, patch):
    settings = {"patch": patch, "atoms": 64, "iterations": 4, "source": source}
    one = recover(points, "dictionary", **settings)
    zero = recover(points, "zero-filled").image
    assert error(one.image, planes) < 0.8 * error(zero, planes)
    two = recover(points, "dictionary", **settings)
    np.testing.assert_array_equal(one.image, two.image)
    assert one.extras["sheets"]["atoms"].shape[:3] == (patch, patch, 1)
    assert one.extras["residual"].shape == planes.shape
    assert not one.certificate.certified


def test_data_and_noise_scaled_together_change_only_the_scale(lines):
    settings = {"patch": 6, "atoms": 64, "iterations": 3}
    one = recover(lines, "dictionary", **settings).image
    factor = 3.7 - 2.1j
    sigma = abs(factor) * lines.sigma_added
    scaled = replace(lines, kspace=lines.kspace * factor, sigma_added=sigma)
    assert error(recover(scaled, "dictionary", **settings).image, factor * one) < 1e-6


@pytest.mark.parametrize(
    ("settings", "says"),
    [
        ({"source": "trained"}, "do not go together"),
        ({"patch": 64}, "patch"),
        ({"source": "learned"}, "source must be one of"),
    ],
)
def test_bad_settings_are_refused(points, settings, says):
    with pytest.raises(RecoveryError, match=says):
        recover(points, "dictionary", **settings)
