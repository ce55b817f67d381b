"""Noise covariance, whitening, compression, combination, silent channels."""

import re
from itertools import pairwise

import numpy as np
import pytest
from receive import regular, scene
from scipy.stats import chi

from mrics.encoding import (
    blocks,
    border_covariance,
    combine_channels,
    compress,
    noise_covariance,
    root_sum_of_squares,
    singular_values,
    undersample,
    whitening,
)
from mrics.encoding.acquisition import Acquisition
from mrics.encoding.noise import border_noise
from mrics.errors import AcquisitionError, MricsWarning
from mrics.numerics import centred_ifft
from mrics.sampling.pattern import Pattern
from mrics.scan.volume import Axes, Scan


def complex_noise(generator, *shape):
    """Real and imaginary part of standard deviation 1."""
    return generator.standard_normal(shape) + 1j * generator.standard_normal(shape)


def full(*grid):
    return Pattern(np.ones(grid, bool), calibration=grid)


def as_acquisition(kspace, calibration, **more):
    u, v = kspace.shape[2:]
    mask = np.ones((1, u, v), bool)
    return Acquisition(
        kspace, mask, np.zeros(len(kspace), int), full(u, v), calibration=calibration, **more
    )


def test_whitening_is_the_inverse_cholesky_factor():
    # Source: N7, worked matrix: L = [[1.414214, 0], [-0.707107i, 1.224745]].
    psi = np.array([[2, 1j], [-1j, 2]])
    matrix = whitening(psi)
    factor = np.array([[1.414214, 0], [-0.707107j, 1.224745]])
    np.testing.assert_allclose(np.linalg.inv(matrix), factor, atol=1e-6)
    np.testing.assert_allclose(matrix @ psi @ matrix.conj().T, np.eye(2), atol=1e-12)


@pytest.mark.parametrize("count", [100, 1000, 10000])
def test_covariance_from_samples_is_as_sure_as_it_can_be(count):
    # Source: N7: a variance from n samples has relative SD sqrt(2/(n-1)) per real part, complex
    # samples hold two, so the mean over both parts has 1/sqrt(n-1).
    generator = np.random.default_rng(count)
    psi = np.array([[2, 1j], [-1j, 2]])
    factor = np.linalg.cholesky(psi)
    found = np.array(
        [noise_covariance(factor @ complex_noise(generator, 2, count)) for _ in range(40)]
    )
    sure = 1 / np.sqrt(count - 1)
    spread = found[:, 0, 0].real.std() / 2
    assert 0.6 * sure < spread < 1.5 * sure
    np.testing.assert_allclose(found.mean(axis=0), psi, atol=2 * 4 * sure / np.sqrt(40))


def test_covariance_from_the_border_of_a_readout():
    maps, _, images = scene(48, 80, channels=3, planes=24)
    wide = np.zeros((24, 48, 160), complex)
    wide[:, :, 40:120] = images
    wide_maps = np.pad(maps, ((0, 0), (0, 0), (40, 40)), mode="edge")[None]
    psi = np.array([[1, 0.3j, 0], [-0.3j, 1, 0.2], [0, 0.2, 1]])
    pattern = regular((48,), (2,), 12)
    data = undersample(wide, pattern, 0.05, 4, sensitivities=wide_maps, covariance=psi)
    found = border_covariance(data, 0.2)
    np.testing.assert_allclose(found, 0.05**2 * psi, atol=0.05**2 * 0.05)
    with pytest.raises(AcquisitionError, match="border holds signal"):
        border_covariance(data, 0.9)


def test_a_border_that_is_no_receiver_noise_is_not_believed():
    maps, _, images = scene(48, 160, channels=4, planes=24)
    # Noise that went through the sensitivities is louder in the coil of its own side.
    generator = np.random.default_rng(3)
    noise = complex_noise(generator, *images.shape)
    data = undersample(noise, regular((48,), (1,)), sensitivities=maps[None])
    psi, text = border_noise(data)
    assert psi is None
    assert re.search(r"channel 0 has [\d.]+ times the energy at one end", text)
    thin = np.zeros((1, 48, 32), complex)
    few = undersample(thin, regular((48,), (2,)), 1.0, 2, sensitivities=maps[None, ..., :32])
    psi, text = border_noise(few)
    assert psi is None
    assert "48 samples, too few for 4 channels (100 are needed)" in text


def test_covariance_from_the_end_planes_of_a_3d_scan():
    maps, _, images = scene(32, 32, channels=2)
    volume = np.zeros((40, 32, 32), complex)
    volume[10:30] = images
    psi = np.array([[1.0, 0.4], [0.4, 2.0]])
    pattern = regular((32, 32), (1, 2), 8)
    data = undersample(
        volume, pattern, 0.1, 5, sensitivities=maps[None], covariance=psi, axes=Axes("i", "j", "k")
    )
    found = border_covariance(data, 0.3)
    np.testing.assert_allclose(found, 0.01 * psi / 1.5, atol=0.01 * 0.08)
    bare = undersample(volume, pattern, 0.1, 5, sensitivities=maps[None])
    with pytest.raises(AcquisitionError, match="does not say where its readout ends are"):
        border_covariance(bare)


def test_compression_keeps_the_energy_of_the_singular_values():
    # Source: P9 (Eckart-Young), singular values 8, 4, 2, 1: .752941, .941176, .988235, 1.
    generator = np.random.default_rng(7)
    left = np.linalg.qr(complex_noise(generator, 4, 4))[0]
    right = np.linalg.qr(complex_noise(generator, 36, 4))[0]
    kspace = (left * [8, 4, 2, 1] @ right.conj().T).reshape(1, 4, 6, 6)
    data = as_acquisition(kspace, (6, 6))
    np.testing.assert_allclose(singular_values(data), [8, 4, 2, 1])
    for count, share in zip((1, 2, 3, 4), ("75.29", "94.12", "98.82", "100.00"), strict=True):
        note = compress(data, count).notes[-1]
        assert note == f"4 channels compressed to {count}, {share} % of energy kept"
    assert compress(data, energy=0.94).compression.shape == (1, 2, 4)
    assert compress(data, energy=0.9412).compression.shape == (1, 3, 4)
    assert compress(data, energy=1.0).compression.shape == (1, 4, 4)


@pytest.mark.parametrize("per_plane", [False, True])
def test_all_channels_kept_lose_nothing_and_white_noise_stays_white(per_plane):
    # Source: P9: a unitary compression.
    maps, _, images = scene(32, 32, channels=4, planes=3)
    psi = np.eye(4) + 0.3j * (np.eye(4, k=1) - np.eye(4, k=-1))
    pattern = regular((32, 32), (1, 2), 12)
    data = undersample(images, pattern, 0.0, 1, sensitivities=maps[None], covariance=psi)
    packed = compress(data, 4, per_plane=per_plane)
    for (_, one, raw), (planes, two, few) in zip(blocks(data), blocks(packed), strict=True):
        np.testing.assert_allclose(one.normal(images[planes]), two.normal(images[planes]))
        np.testing.assert_allclose(one.adjoint(raw), two.adjoint(few), atol=1e-12)
    few = compress(data, 2, per_plane=per_plane).compression
    np.testing.assert_allclose(
        few @ few.conj().swapaxes(1, 2), np.eye(2) * np.ones((len(few), 1, 1)), atol=1e-12
    )


def test_alignment_brings_neighbouring_matrices_as_close_as_can_be():
    # Source: Zhang et al. 2013; the least distance of two subspaces' orthonormal bases is
    # sqrt(2 (n - sum of cosines of their principal angles)) (orthogonal Procrustes).
    maps, _, images = scene(32, 32, channels=6, planes=8)
    turn = np.exp(1j * np.linspace(0, 0.5, 8))[:, None] ** np.arange(6)
    turned = maps[None] * turn[..., None, None]
    data = undersample(images, regular((32, 32), (1, 2), 12), sensitivities=turned)
    aligned = compress(data, 3, per_plane=True).compression
    for one, two in pairwise(aligned):
        cosines = np.linalg.svd(one @ two.conj().T, compute_uv=False)
        least = np.sqrt(2 * (3 - cosines.sum()))
        assert np.linalg.norm(one - two) == pytest.approx(least, rel=1e-6)
    for plane in (0, 4, 7):
        alone = compress(data_of(images, turned, plane), 3).compression[0]
        same = aligned[plane] @ alone.conj().T
        np.testing.assert_allclose(same @ same.conj().T, np.eye(3), atol=1e-10)


def data_of(images, maps, plane):
    part = slice(plane, plane + 1)
    return undersample(images[part], regular((32, 32), (1, 2), 12), sensitivities=maps[part])


@pytest.mark.parametrize(("rho", "snr2"), [(0.0, 2.0), (0.5, 4 / 3)])
def test_optimal_combination_reaches_the_matched_filter(rho, snr2):
    # Source: N8 (Roemer 1990): SNR^2 = s^H Psi^-1 s for s = (1, 1).
    psi = np.array([[1, rho], [rho, 1]])
    assert snr_of_combination(np.array([1.0, 1.0]), psi, psi) ** 2 == pytest.approx(snr2)


def test_combination_without_covariance_is_worse():
    # Source: N8: s = (1, .5), rho = .5: optimal 1.0, without Psi 0.944911.
    psi = np.array([[1, 0.5], [0.5, 1]])
    s = np.array([1.0, 0.5])
    assert snr_of_combination(s, psi, psi) == pytest.approx(1.0)
    assert snr_of_combination(s, psi, None) == pytest.approx(0.944911, abs=1e-6)


def snr_of_combination(s, psi, given):
    """Signal over noise of the linear combination, its weights read off unit channels."""
    maps = s.reshape(1, 2, 1, 1)
    weights = [
        combine_channels(np.eye(2)[c].reshape(1, 2, 1, 1).astype(complex), maps, given)[0, 0, 0]
        for c in range(2)
    ]
    w = np.array(weights)
    return float(abs(w @ s) / np.sqrt((w @ psi @ w.conj()).real))


def test_combination_is_unchanged_by_mixing_the_coils():
    # Source: N8: invariant under any invertible mixing.
    generator = np.random.default_rng(8)
    maps, images = complex_noise(generator, 1, 3, 4, 5), complex_noise(generator, 2, 3, 4, 5)
    psi = np.eye(3) + 0.2
    mixing = complex_noise(generator, 3, 3)
    one = combine_channels(images, maps, psi)
    two = combine_channels(
        np.einsum("cd,pduv->pcuv", mixing, images),
        np.einsum("cd,pduv->pcuv", mixing, maps),
        mixing @ psi @ mixing.conj().T,
    )
    np.testing.assert_allclose(one, two, atol=1e-10)


@pytest.mark.parametrize(
    ("channels", "mean", "sd"), [(2, 1.879971, 0.682428), (8, 3.938026, 0.701394)]
)
def test_root_sum_of_squares_noise_has_central_chi_moments(channels, mean, sd):
    # Source: N3 (Constantinides 1997); scipy.stats.chi with 2n degrees of freedom.
    assert chi.mean(2 * channels) == pytest.approx(mean, abs=1e-6)
    maps = np.ones((1, channels, 128, 128))
    data = undersample(np.zeros((4, 128, 128)), full(128), 1.0, 3, sensitivities=maps)
    found = root_sum_of_squares(centred_ifft(data.kspace))
    assert found.mean() == pytest.approx(mean, rel=3e-3)
    assert found.std() == pytest.approx(sd, rel=1e-2)


def test_root_sum_of_squares_of_signal_is_biased_as_published():
    # Source: N3: A = 3, n = 4: mean 4.029548, SD .873352.
    maps = np.full((1, 4, 128, 128), 1.5)
    data = undersample(np.ones((4, 128, 128)), full(128), 1.0, 3, sensitivities=maps)
    found = root_sum_of_squares(centred_ifft(data.kspace))
    assert found.mean() == pytest.approx(4.029548, rel=3e-3)
    assert found.std() == pytest.approx(0.873352, rel=1e-2)


def test_averages_and_resolution_change_snr_as_the_law_says():
    # Source: N9 (Edelstein 1986): SNR ~ sqrt(averages): four averages double it.
    draws = [undersample(np.zeros((1, 128, 128)), full(128), 1.0, s).kspace for s in range(4)]
    averaged = np.mean(draws, axis=0)
    assert draws[0].real.std() / averaged.real.std() == pytest.approx(2.0, rel=0.03)


def test_silent_channel_is_named_and_dropped():
    data = np.ones((4, 4, 3, 1, 3), np.complex64)
    data[..., 1] = 0
    scan = Scan(data, np.eye(4), (1.0, 1.0, 1.0))
    with pytest.warns(MricsWarning, match=r"without signal left out: 1 \(counted from 0\)"):
        made = undersample(scan, full(4), sigma_scan=0.0)
    assert made.channels == 2
    assert "left out: 1" in made.notes[-1]
    scan = Scan(np.zeros((4, 4, 3, 1, 3), np.complex64), np.eye(4), (1.0, 1.0, 1.0))
    with pytest.raises(AcquisitionError, match="All 3 channels hold only zeros"):
        undersample(scan, full(4), sigma_scan=0.0)


def test_refusals():
    generator = np.random.default_rng(9)
    with pytest.raises(AcquisitionError, match="must be complex"):
        noise_covariance(np.zeros((2, 100)))
    with pytest.raises(AcquisitionError, match="3 noise samples are too few for 3 channels"):
        noise_covariance(complex_noise(generator, 3, 3))
    samples = complex_noise(generator, 2, 50)
    samples[0, 3] = np.nan
    with pytest.raises(AcquisitionError, match="1 NaN or infinite"):
        noise_covariance(samples)
    with pytest.raises(AcquisitionError, match="not positive definite"):
        noise_covariance(np.ones((2, 1)) * complex_noise(generator, 1, 50))
    data = as_acquisition(complex_noise(generator, 1, 4, 6, 6), (6, 6))
    with pytest.raises(AcquisitionError, match="either channels or energy"):
        compress(data)
    with pytest.raises(AcquisitionError, match="5 virtual channels cannot be made of 4"):
        compress(data, 5)
    with pytest.raises(AcquisitionError, match=r"energy share of 1\.5"):
        compress(data, energy=1.5)
    with pytest.raises(AcquisitionError, match="another grid"):
        combine_channels(np.ones((1, 2, 4, 4)), np.ones((1, 2, 4, 5)))
