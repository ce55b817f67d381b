"""Frozen recoveries: weights, random shifts and noise kept between paired runs."""

import numpy as np
import pytest
from chains import acquire, coils, phantom

from mrics.encoding import some_planes
from mrics.quality.chain import Chain
from mrics.recovery import recover


@pytest.mark.parametrize("settings", [{}, {"shift": "none"}, {"shift": "random", "seed": 3}])
def test_no_change_gives_the_base_again(settings):
    chain = Chain(acquire(phantom((2, 32, 32))), "wavelet", iterations=12, **settings)
    zero = np.zeros_like(chain.acquisition.kspace)
    for image in chain.images([zero, zero, zero]):
        np.testing.assert_array_equal(image, chain.base)
    assert chain.runs == 4
    assert isinstance(chain.settings["weight"], float)


def test_a_change_of_the_object_is_that_of_its_data():
    image = phantom((2, 32, 24))
    change = np.zeros_like(image)
    change[1, 10:14, 8] = 0.3j
    for more in ({}, {"sensitivities": coils(32, 24)}):
        before, after = acquire(image, **more), acquire(image + change, **more)
        chain = Chain(before, "zero-filled")
        changed = next(chain.images([chain.encode(change)]))
        np.testing.assert_allclose(changed, recover(after, "zero-filled").image, atol=1e-12)


def test_noise_has_the_level_and_covariance_of_the_acquisition():
    psi = np.array([[1.0, 0.6], [0.6, 1.5]])
    held = acquire(phantom((4, 64, 48)), sigma=0.2, sensitivities=coils(64, 48, 2), covariance=psi)
    noise = Chain(held, "zero-filled").noise(np.random.default_rng(0))
    acquired = np.broadcast_to(held.mask[0], (64, 48))
    assert not noise[:, :, ~acquired].any()
    samples = np.moveaxis(noise[:, :, acquired], 1, 0).reshape(2, -1)
    measured = (samples @ samples.conj().T).real / samples.shape[1] / 2
    np.testing.assert_allclose(measured, 0.04 * psi / 1.25, rtol=0.05)


def test_planes_keep_their_data():
    held = acquire(phantom((3, 32, 24)), sensitivities=np.repeat(coils(32, 24), 3, axis=0))
    part = some_planes(held, [2, 0])
    np.testing.assert_array_equal(part.kspace[1], held.kspace[0])
    assert part.sensitivities.shape[0] == 2
    np.testing.assert_allclose(
        recover(part, "zero-filled").image[0], recover(held, "zero-filled").image[2]
    )
