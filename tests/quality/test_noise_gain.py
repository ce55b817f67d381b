"""Noise gain by replicas against analytic maps."""

import numpy as np
import pytest
from chains import acquire, body, coils, full, phantom

from mrics.encoding import some_planes, undersample
from mrics.errors import AcquisitionError, QualityError
from mrics.quality.chain import Chain
from mrics.quality.noise_gain import full_sampling_sd, noise_gain
from mrics.sampling import Pattern


def equispaced(length, step):
    mask = np.zeros(length, bool)
    mask[length // 2 % step :: step] = True
    return Pattern(mask)


def test_zero_filled_noise_is_the_root_of_the_sampled_share():
    # SD sigma sqrt(M / N) per part, unitary transform.
    chain = Chain(acquire(phantom()), "zero-filled")
    gain = noise_gain(chain, 300, seed=1)
    wanted = np.sqrt(1.0 / gain.acceleration)
    deviation = gain.ratio / wanted - 1.0
    assert np.median(np.abs(deviation)) < 0.03
    assert abs(deviation.mean()) < 0.005
    np.testing.assert_allclose(gain.gain, gain.ratio / np.sqrt(gain.acceleration))
    assert gain.note == ""


def test_full_sampling_gains_nothing():
    chain = Chain(acquire(phantom(), full((64,))), "zero-filled")
    gain = noise_gain(chain, 100)
    assert gain.acceleration == 1.0
    assert gain.ratio.mean() == pytest.approx(1.0, abs=0.01)


def test_least_squares_gain_is_the_geometry_factor():
    # g = sqrt([(S^H Psi^-1 S)^-1]_pp [S^H Psi^-1 S]_pp), Pruessmann et al. 1999, by dense algebra
    # on each pair of aliased voxels, with correlated noise.
    u, v, step = 24, 6, 2
    maps = coils(u, v, 4)
    psi = 0.3 * np.ones((4, 4)) + 0.7 * np.eye(4)
    image = phantom((1, u, v))
    acquisition = undersample(
        image, equispaced(u, step), 0.05, seed=2, sensitivities=maps, covariance=psi
    )
    chain = Chain(acquisition, "least-squares", damping=0.0, iterations=200, tolerance=1e-10)
    gain = noise_gain(chain, 300, seed=4)
    inverse = np.linalg.inv(psi)
    wanted = np.empty((u, v))
    for row in range(u):
        for column in range(v):
            aliased = [row, (row + u // step) % u]
            s = maps[0][:, aliased, column]
            gram = s.conj().T @ inverse @ s
            wanted[row, column] = np.sqrt(np.linalg.inv(gram)[0, 0] * gram[0, 0]).real
    deviation = gain.gain[0] / wanted - 1.0
    assert np.median(np.abs(deviation)) < 0.03
    assert abs(deviation.mean()) < 0.005


def test_full_sampling_noise_of_channels():
    # 1 / sqrt(s^H Psi^-1 s), Roemer et al. 1990 (matched filter).
    maps = coils(12, 10, 3)
    psi = np.array([[2, 1j, 0], [-1j, 2, 0.5], [0, 0.5, 1]])
    acquisition = undersample(
        phantom((1, 12, 10)), full((12,)), 0.1, sensitivities=maps, covariance=psi
    )
    chain = Chain(acquisition, "zero-filled")
    relative = psi / np.trace(psi).real * 3
    s = maps[0].reshape(3, -1)
    wanted = 0.1 / np.sqrt(np.einsum("cp,cd,dp->p", s.conj(), np.linalg.inv(relative), s).real)
    np.testing.assert_allclose(full_sampling_sd(chain)[0].ravel(), wanted, rtol=1e-10)


def test_replicas_are_frozen_by_seed_and_say_what_they_are():
    chain = Chain(acquire(phantom((1, 32, 32)), full((32,))), "wavelet", iterations=10)
    seen = []
    first = noise_gain(
        chain, 4, mask=body((1, 32, 32)), progress=lambda done, total: seen.append((done, total))
    )
    second = noise_gain(chain, 4, mask=body((1, 32, 32)))
    np.testing.assert_array_equal(first.sd, second.sd)
    assert seen[-1] == (4, 4)
    assert "not linear" in first.note
    assert set(first.ratio_percentiles) == {5, 25, 50, 75, 95}


def test_bad_input():
    chain = Chain(acquire(phantom((1, 32, 32))), "zero-filled")
    with pytest.raises(QualityError, match="1 replicas give no standard deviation"):
        noise_gain(chain, 1)
    with pytest.raises(QualityError, match=r"Mask of shape \(1, 4, 4\)"):
        noise_gain(chain, 2, mask=np.ones((1, 4, 4), bool))
    with pytest.raises(AcquisitionError, match=r"Planes \[3\] are not in a stack of 1"):
        some_planes(chain.acquisition, [3])
