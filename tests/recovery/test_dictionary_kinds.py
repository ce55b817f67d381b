"""Every kind of dictionary, trained, stored, loaded and used: complex, 3-D, joint, K-SVD."""

import numpy as np
import pytest
from conftest import blobs

from mrics.encoding import undersample
from mrics.errors import RecoveryError
from mrics.recovery import recover
from mrics.recovery.dictionary import load_dictionary, save_dictionary
from mrics.recovery.dictionary.training import Training, TrainingScan, train_dictionary
from mrics.sampling import draw_pattern

KINDS = {
    "complex": {"kind": "complex"},
    "3-D": {"depth": 2},
    "joint": {"joint": True},
    "k-svd": {"method": "k-svd"},
}


def scan(seed: int, frames: int = 2) -> TrainingScan:
    stack = blobs((2 * frames, 40, 48), seed).astype(np.complex64)
    return TrainingScan(stack, np.abs(stack) > 0.01, f"scan-{seed}", "ab" * 32, frames)


@pytest.mark.parametrize("name", KINDS)
def test_a_trained_dictionary_of_every_kind_recovers(name, tmp_path):
    made = train_dictionary(
        [scan(1), scan(2)], Training(patch=4, atoms=64, patches=3000, **KINDS[name])
    )
    path = save_dictionary(made, tmp_path / "d.npz")
    layers = {"3-D": 2, "joint": 2}.get(name, 1)
    held = load_dictionary(path, layers=layers)
    assert held.atoms.shape == (64, 16 * layers)
    assert np.iscomplexobj(held.atoms) == (name == "complex")
    np.testing.assert_allclose(np.linalg.norm(held.atoms, axis=1), 1.0, rtol=1e-5)
    truth = blobs((4, 40, 48), 3).astype(np.complex64)
    pattern = draw_pattern((40, 48), acceleration=3, calibration=10, seed=4, frames=2)
    data = undersample(truth, pattern, sigma=0.02, seed=1)
    settings = {"iterations": 3, "joint": name == "joint"}
    result = recover(data, "dictionary", dictionary=str(path), **settings)
    zero = recover(data, "zero-filled").image
    assert np.linalg.norm(result.image - truth) < 0.8 * np.linalg.norm(zero - truth)
    assert result.extras["domain_map"].shape == truth.shape
    assert result.extras["sheets"]["atoms"].shape == (4, 4, layers, 64)
    if layers > 1:
        with pytest.raises(RecoveryError, match=r"stacks 2 planes .* recovery [14]"):
            recover(data, "dictionary", dictionary=str(path), joint=name == "3-D")


def test_joint_scans_must_have_as_many_frames():
    with pytest.raises(RecoveryError, match="stack 2 and 4 planes in a patch"):
        train_dictionary([scan(1), scan(2, 4)], Training(patch=4, atoms=64, joint=True))
