"""Learning, coding and recovery with patch dictionaries beside scikit-learn, in the same run.

Run with ``pytest tests/benchmarks/test_dictionary_speed.py -s``; prints figures, asserts on results
alone. Wall times on a machine that does other work too are upper bounds: processor time stands
beside them.
"""

import time
import tracemalloc

import nibabel
import numpy as np
import pytest
from open_volumes import open_volume
from sklearn.decomposition import MiniBatchDictionaryLearning
from sklearn.linear_model import orthogonal_mp_gram

from mrics.encoding import undersample
from mrics.recovery import recover
from mrics.recovery.dictionary import code, learn_online
from mrics.recovery.dictionary.coding import Prepared, pursue
from mrics.sampling import draw_pattern

ATOMS, SIDE, PATCHES = 256, 8, 20_000


def fastest(function, repeats):
    """Smallest wall and processor time of some calls, and the last result."""
    wall, busy, result = np.inf, np.inf, None
    for _ in range(repeats):
        start, own = time.perf_counter(), time.process_time()
        result = function()
        wall = min(wall, time.perf_counter() - start)
        busy = min(busy, time.process_time() - own)
    return wall, busy, result


@pytest.fixture(scope="module")
def patches():
    """20,000 mean-free 8 x 8 patches of volume G (magnitude), those with some contrast."""
    volume = np.asarray(nibabel.load(open_volume("G")).dataobj, np.float32)
    volume /= volume.max()
    windows = np.lib.stride_tricks.sliding_window_view(volume[..., 20:70], (SIDE, SIDE), (0, 1))
    flat = windows.reshape(-1, SIDE * SIDE)
    order = np.random.default_rng(0).permutation(len(flat))[: 3 * PATCHES]
    taken = flat[order] - flat[order].mean(axis=1, keepdims=True)
    taken = taken[np.square(taken).sum(axis=1) > 1e-2][:PATCHES]
    assert len(taken) == PATCHES
    return np.ascontiguousarray(taken)


@pytest.fixture(scope="module")
def learned(patches):
    learn_online(patches[:3000], ATOMS, passes=1)  # compiled before the clock starts
    return fastest(lambda: learn_online(patches, ATOMS, sparsity=5, passes=3), 3)


def residual(patches, atoms):
    codes = code(patches, atoms, "omp", sparsity=6)
    return float(np.sqrt(codes.residual.sum() / np.square(patches, dtype=np.float64).sum()))


def test_learning(patches, learned, figure):
    wall, busy, atoms = learned
    theirs = MiniBatchDictionaryLearning(
        ATOMS, max_iter=1, batch_size=256, transform_algorithm="omp", fit_algorithm="lars",
        alpha=0.05, random_state=0, n_jobs=2, max_no_improvement=None,
    )  # fmt: skip
    start = time.perf_counter()
    theirs.fit(patches)
    other = time.perf_counter() - start
    rows = theirs.components_ / np.linalg.norm(theirs.components_, axis=1, keepdims=True)
    ours, reference = residual(patches, atoms), residual(patches, rows.astype(np.float32))
    figure("256 atoms of 8 x 8 from 20,000 patches, 3 passes",
           f"{wall:.2f} s ({busy:.2f} s processor), {other / wall:.0f} x scikit-learn's epoch",
           "0.6 s")  # fmt: skip
    figure("residual at 6 atoms against scikit-learn's", f"{ours:.4f} / {reference:.4f}", "1.02 x")
    assert ours <= 1.02 * reference


def test_pursuit(patches, learned, figure):
    atoms = learned[2]
    many = np.concatenate([patches] * 3)
    prepared = Prepared(atoms)
    wall, busy, codes = fastest(lambda: pursue(many, prepared, 6), 5)
    few = patches[:2000]
    gram, products = atoms @ atoms.T, atoms @ few.T

    def by_them():
        return orthogonal_mp_gram(gram, products, n_nonzero_coefs=6, copy_Xy=True)

    other, other_busy, theirs = fastest(by_them, 3)
    per_patch, their_patch = 1e6 * wall / len(many), 1e6 * other / len(few)
    figure("batch pursuit, 256 atoms, 6 a patch, real float32",
           f"{per_patch:.1f} us a patch ({1e6 * busy / len(many):.1f} us processor), "
           f""
        f"{their_patch / per_patch:.0f} x scikit-learn's (processor time "
        f"{other_busy / len(few) / (busy / len(many)):.0f} x)", "4 us, 100 x")  # fmt: skip
    ours = codes.dense(ATOMS)[: len(few)]
    same = np.count_nonzero((ours != 0) != (theirs.T != 0), axis=1) == 0
    left = np.square(few - theirs.T @ atoms).sum(axis=1)
    apart = np.abs(codes.residual[: len(few)] - left) / np.square(few).sum(axis=1)
    figure("same atoms as scikit-learn's", f"{100 * same.mean():.2f} % of patches, the rest "
           f"within {apart[~same].max(initial=0):.1e} of the energy", "99.9 %")  # fmt: skip
    assert same.mean() >= 0.999
    assert apart[~same].max(initial=0) <= 1e-4
    turned = (many + 1j * np.roll(many, 1, axis=0)).astype(np.complex64)
    whole = (atoms + 1j * np.roll(atoms, 1, axis=0)).astype(np.complex64) / np.float32(2**0.5)
    wall_c, _, _ = fastest(lambda: pursue(turned, Prepared(whole), 6), 3)
    figure("the same, complex", f"{1e6 * wall_c / len(many):.1f} us a patch, "
           f"{wall_c / wall:.1f} x real", "3 x")  # fmt: skip


def head(planes, side=256):
    """Volume G's slices, every sample twice along both axes, on a 256 x 256 grid with a phase."""
    volume = np.asarray(nibabel.load(open_volume("G")).dataobj, np.float32)
    y, x = np.mgrid[-1 : 1 : side * 1j, -1 : 1 : side * 1j]
    stack = np.zeros((planes, side, side), np.complex64)
    for number in range(planes):
        double = (volume[:, :, 30 + number] / volume.max()).repeat(2, 0).repeat(2, 1)
        stack[number, 37 : 37 + double.shape[0], 19 : 19 + double.shape[1]] = double
    return stack * np.exp(1j * (x + y * y)).astype(np.complex64)


@pytest.mark.parametrize(("channels", "aim"), [(1, "4 s"), (8, "8 s")])
def test_recovery_of_a_plane(channels, aim, figure):
    image = head(1)
    pattern = draw_pattern((256, 256), law="power", exponent=3, acceleration=4, seed=1)
    maps = None
    if channels > 1:
        y, x = np.mgrid[-1 : 1 : 256 * 1j, -1 : 1 : 256 * 1j]
        angles = 2 * np.pi * np.arange(channels) / channels
        maps = np.array([np.exp(-((x - np.cos(a)) ** 2) - (y - np.sin(a)) ** 2) for a in angles])
        maps = (maps / np.sqrt(np.square(maps).sum(0))).astype(np.complex64)[None]
    data = undersample(image, pattern, sigma=0.01, seed=1, sensitivities=maps)
    wall, busy, result = fastest(lambda: recover(data, "dictionary", iterations=10), 2)
    atoms = result.history["atoms_per_patch"][-1]
    figure(f"dictionary, 256 x 256, {channels} channel(s), 10 iterations",
           f"{wall:.1f} s ({busy:.1f} s processor), {atoms:.1f} atoms a patch", aim)  # fmt: skip
    assert np.isfinite(result.image).all()


def test_recovery_of_a_stack(figure):
    image = head(16)
    pattern = draw_pattern((256, 256), law="power", exponent=3, acceleration=4, seed=1)
    data = undersample(image, pattern, sigma=0.01, seed=1)
    recover(undersample(image[:1], pattern, sigma=0.01, seed=1), "dictionary", iterations=1)
    wall, result = np.inf, None
    for _ in range(3):
        start, own = time.perf_counter(), time.process_time()
        result = recover(data, "dictionary", iterations=10)
        taken = time.perf_counter() - start
        if taken < wall:
            wall, busy = taken, time.process_time() - own
    atoms = result.history["atoms_per_patch"][-1]
    tracemalloc.start()
    recover(data, "dictionary", iterations=2)
    most = tracemalloc.get_traced_memory()[1] / 1e6
    tracemalloc.stop()
    figure("dictionary, 16 planes of 256 x 256, 10 iterations: cores in use, memory beyond data",
           f"{busy / wall:.2f} of 2 ({wall:.1f} s), {most:.0f} MB, {atoms:.1f} atoms a patch",
           "1.8, 600 MB")  # fmt: skip
    assert most < 600
