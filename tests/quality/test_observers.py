"""Observers against closed forms and inequalities of signal detection."""

import numpy as np
import pytest
from chains import acquire, coils, full, phantom
from scipy.stats import norm

from mrics.errors import QualityError
from mrics.numerics import centred_fft, centred_ifft
from mrics.quality.chain import Chain
from mrics.quality.observers.background import Spectrum, fit_spectrum
from mrics.quality.observers.hotelling import (
    accuracy,
    channel_templates,
    hotelling_observer,
)
from mrics.quality.observers.ideal import detectability, ideal_observer
from mrics.quality.observers.tasks import Task
from mrics.sampling import Pattern, draw_pattern

MM = (1.0, 1.5)
SPECTRUM = Spectrum(20.0, 1 / 48, 3.0)


def test_known_signal_in_white_noise():
    # d' = ||s|| / sigma (matched filter), full sampling.
    tasks = [Task("detection", 3.0, 0.2), Task("two-against-one", 4.0, 0.3, axis="v")]
    found = ideal_observer([full((48, 40))], tasks, (48, 40), MM, 0.07, SPECTRUM)
    for task, d_prime in zip(tasks, found.noise_only[0], strict=True):
        signal = centred_ifft(task.kspace((48, 40), MM))
        assert d_prime == pytest.approx(np.linalg.norm(signal) / 0.07, rel=1e-6)


def test_detection_signal_is_the_disc():
    # A disc of n pixels and height A has d' = A sqrt(n) / sigma, here area over voxel area.
    signal = centred_ifft(Task("detection", 12.0, 0.5).kspace((64, 64), (1.0, 1.0)))
    assert np.abs(signal[32, 32]) == pytest.approx(0.5, rel=0.1)
    assert np.linalg.norm(signal) ** 2 == pytest.approx(0.25 * np.pi * 36, rel=0.05)


def test_two_points_and_one_line_have_equal_energy():
    task = Task("two-against-one", 6.0)
    k = np.meshgrid(*2 * [(np.arange(64) - 32) / 64], indexing="ij")
    signal = task.kspace((64, 64), (1.0, 1.0))
    from mrics.quality.features import disc_transform

    two = 2 * np.cos(np.pi * 6 * k[0]) * disc_transform(1.5, np.hypot(*k)) / 64
    bar = two - signal
    assert np.linalg.norm(two) == pytest.approx(np.linalg.norm(bar))
    # Between the two points the line is bright and they are dark.
    image = centred_ifft(signal).real
    assert image[32, 32] < 0 < image[32 + 3, 32]


def test_a_shifted_signal_sits_at_its_site():
    image = centred_ifft(Task("detection", 3.0).kspace((40, 32), MM, (11, 25))).real
    assert np.unravel_index(image.argmax(), image.shape) == (11, 25)


def test_anatomical_background_has_its_closed_form():
    # One channel: the sum over measured samples of |s_k|^2 / (S'_k + sigma^2).
    pattern = draw_pattern((48, 40), acceleration=3, calibration=10, seed=1)
    task = Task("detection", 3.0, 0.4)
    found = ideal_observer([pattern], [task], (48, 40), MM, 0.1, SPECTRUM)
    signal = task.kspace((48, 40), MM)
    power = SPECTRUM.on_grid((48, 40), MM)
    wanted = np.sum((np.abs(signal) ** 2 / (power + 0.01))[pattern.mask])
    assert found.anatomical[0, 0] == pytest.approx(np.sqrt(wanted), rel=1e-10)
    # The same as a Hotelling observer of the samples with their covariance, by its definition.
    assert found.anatomical[0, 0] <= found.noise_only[0, 0]


@pytest.mark.parametrize("sigma", [0.02, 0.1, 1.0])
def test_channels_agree_with_the_closed_form_where_they_are_one(sigma):
    shape = (48, 40)
    pattern = draw_pattern(shape, acceleration=2, calibration=10, seed=1)
    tasks = [Task("detection", 2.0), Task("two-against-one", 3.0)]
    one = ideal_observer([pattern], tasks, shape, MM, sigma, SPECTRUM)
    maps = np.ones((1, *shape), complex)
    many = ideal_observer([pattern], tasks, shape, MM, sigma, SPECTRUM, sensitivities=maps)
    np.testing.assert_allclose(many.anatomical, one.anatomical, rtol=1e-3)
    np.testing.assert_allclose(many.noise_only, one.noise_only, rtol=1e-5)


@pytest.mark.parametrize("pattern", [draw_pattern(16, acceleration=2, calibration=4), None])
def test_channels_agree_with_dense_algebra(pattern):
    # d'^2 = s^H E^H (Psi + E K' E^H)^-1 E s, every matrix written out.
    shape, sigma = (16, 12), 0.15
    pattern = pattern or draw_pattern(shape, acceleration=3, calibration=4)
    maps = coils(*shape, 3)[0]
    task, site = Task("detection", 3.0), (7, 8)
    found = ideal_observer(
        [pattern], [task], shape, MM, sigma, SPECTRUM, sensitivities=maps, site=site
    )
    mask = pattern.mask if pattern.mask.ndim == 2 else np.repeat(pattern.mask[:, None], 12, 1)
    identity = np.eye(16 * 12, dtype=complex).reshape(-1, *shape)
    encoded = centred_fft(identity[:, None] * maps)[:, :, mask].reshape(16 * 12, -1).T
    power = SPECTRUM.on_grid(shape, MM)
    covariance = centred_ifft(centred_fft(identity) * power).reshape(16 * 12, -1).T
    signal = centred_ifft(task.kspace(shape, MM, site)).ravel()
    full_covariance = sigma**2 * np.eye(len(encoded)) + encoded @ covariance @ encoded.conj().T
    seen = encoded @ signal
    wanted = np.vdot(seen, np.linalg.solve(full_covariance, seen)).real
    assert found.anatomical[0, 0] == pytest.approx(np.sqrt(wanted), rel=1e-3)
    assert found.noise_only[0, 0] == pytest.approx(np.linalg.norm(seen) / sigma, rel=1e-5)


def test_more_samples_never_lower_the_bound():
    order = np.random.default_rng(0).permutation(48)
    nested = []
    for count in (8, 16, 32, 48):
        mask = np.zeros(48, bool)
        mask[order[:count]] = True
        nested.append(Pattern(mask))
    tasks = [Task("detection", 3.0)]
    maps = coils(48, 40)[0]
    for more in ({}, {"sensitivities": maps}):
        found = ideal_observer(nested, tasks, (48, 40), MM, 0.1, SPECTRUM, **more)
        assert (np.diff(found.anatomical[:, 0]) > 0).all()


def test_a_known_background_prefers_the_centre_and_the_tasks_do_not():
    # R = 4, centre block against one that reaches out: why "noise only" never ranks.
    block, spread = np.zeros((2, 64, 64), bool)
    block[16:48, 16:48] = True
    spread[24:40, 24:40] = True
    rng = np.random.default_rng(0)
    rest = rng.permutation(np.flatnonzero(~spread))[: 1024 - 256]
    spread.flat[rest] = True
    tasks = [Task("detection", 3.0), Task("two-against-one", 2.0)]
    found = ideal_observer(
        [Pattern(block), Pattern(spread)], tasks, (64, 64), (1.0, 1.0), 0.05, SPECTRUM
    )
    assert found.noise_only[0, 0] > found.noise_only[1, 0]
    assert found.anatomical[0, 1] < found.anatomical[1, 1]


def test_spectrum_of_a_known_field_is_found():
    true = Spectrum(40.0, 1 / 64, 2.6)
    rng = np.random.default_rng(4)
    root = np.sqrt(true.on_grid((160, 128), (1.0, 1.0)))
    parts = rng.standard_normal((6, 160, 128)) + 1j * rng.standard_normal((6, 160, 128))
    field = centred_ifft(parts * root)
    field += 0.05 * (rng.standard_normal(field.shape) + 1j * rng.standard_normal(field.shape))
    found = fit_spectrum(field, (1.0, 1.0), sigma=0.05)
    f = np.array([0.05, 0.1, 0.2, 0.4])
    np.testing.assert_allclose(found.at(f), true.at(f), rtol=0.15)
    assert found.exponent == pytest.approx(2.6, abs=0.1)


@pytest.mark.parametrize("channels", [1, 3])
def test_random_data_have_the_power_of_background_noise_and_signal(channels):
    maps = None if channels == 1 else coils(24, 20, channels)
    pattern = Pattern(np.arange(24) % 2 == 0)
    chain = Chain(acquire(phantom((400, 24, 20)), pattern, 0.3, sensitivities=maps), "zero-filled")
    power = SPECTRUM.on_grid((24, 20), MM)
    signal = np.zeros((400, 24, 20), complex)
    signal[:, 12, 10] = 5.0
    data = chain.random(np.random.default_rng(0), power, signal)
    assert data.shape == (400, channels, 24, 20)
    assert not data[:, :, 1::2].any()
    # Mean: the signal as its image is seen. Energy: the field, unit by unit, and the noise.
    weights = np.ones((1, 1, 24, 20)) if maps is None else maps
    mean = centred_fft(weights[0] * centred_ifft(signal[0]))[:, ::2]
    np.testing.assert_allclose(data.mean(axis=0)[:, ::2], mean, atol=1.0)
    energy = (np.abs(data[:, :, ::2] - mean) ** 2).sum(axis=1).mean() / 2
    units = np.eye(480).reshape(480, 1, 24, 20) * np.sqrt(power)
    through = centred_fft(weights * centred_ifft(units))
    field = (np.abs(through) ** 2).sum(axis=(0, 1))[::2].mean()
    assert energy == pytest.approx(field + channels * 0.09, rel=0.03)


@pytest.mark.parametrize(
    ("d_prime", "auc"), [(0.5, 0.638163), (1.0, 0.760250), (2.0, 0.921350), (3.0, 0.983053)]
)
def test_area_of_a_known_distance(d_prime, auc):
    # AUC = Phi(d' / sqrt 2) (difference of two normals); many samples, one informative channel.
    rng = np.random.default_rng(1)
    present, absent = rng.standard_normal((2, 20000, 3))
    present[:, 1] += d_prime
    found = accuracy(present, absent)
    assert found.auc == pytest.approx(auc, abs=0.005)
    assert found.interval.low < auc < found.interval.high
    assert found.auc == pytest.approx(norm.cdf(found.d_prime / np.sqrt(2)))


def test_hotelling_beats_the_plain_matched_filter():
    # K = [[2,1],[1,2]], s = (1,0): Hotelling 2/3 against non-prewhitening 1/2 (Barrett & Myers).
    rng = np.random.default_rng(2)
    root = np.linalg.cholesky(np.array([[2.0, 1.0], [1.0, 2.0]]))
    absent, present = rng.standard_normal((2, 100000, 2)) @ root.T
    present[:, 0] += 1.0
    assert accuracy(present, absent).d_prime ** 2 == pytest.approx(2 / 3, rel=0.03)
    plain = np.mean(present[:, 0] - absent[:, 0]) ** 2 / 2.0
    assert plain == pytest.approx(0.5, rel=0.03)


def test_false_claims_on_noise_alone_stay_at_their_level():
    # A claim is a lower end of the AUC interval above 0.5: 2.5 % of 600, 99.9 % range 4 to 29.
    claims = 0
    for seed in range(600):
        present, absent = np.random.default_rng(seed).standard_normal((2, 60, 10))
        claims += accuracy(present, absent).interval.low > 0.5
    assert 4 <= claims <= 29


def test_intervals_of_the_area_cover_it():
    true = norm.cdf(1.5 / np.sqrt(2))
    hits = 0
    for seed in range(300):
        present, absent = np.random.default_rng([1, seed]).standard_normal((2, 60, 10))
        present[:, 0] += 1.5
        interval = accuracy(present, absent).interval
        hits += interval.low <= true <= interval.high
    # 95 % of 300 with 3.3 standard errors.
    assert 272 <= hits <= 297


def test_channels_never_beat_all_voxels():
    # (U^T s)^T (U^T K U)^-1 (U^T s) <= s^T K^-1 s, Barrett & Myers; equal if K^-1 s is a channel.
    box, templates = channel_templates((40, 40), (1.0, 1.0), (20, 20))
    rng = np.random.default_rng(3)
    factor = rng.standard_normal((1600, 400)) / 20
    covariance = factor @ factor.T + 0.1 * np.eye(1600)
    signal = centred_ifft(Task("detection", 3.0).kspace((40, 40), (1.0, 1.0))).real.ravel()
    best = np.linalg.solve(covariance, signal)
    hotelling = signal @ best
    channels = np.zeros((len(templates), 40, 40))
    channels[(slice(None), *box[1:])] = templates
    for u, bound in ((channels.reshape(-1, 1600), 1.0 - 1e-9), (best[None], None)):
        seen = u @ signal
        squared = seen @ np.linalg.solve(u @ covariance @ u.T, seen)
        if bound is None:
            assert squared == pytest.approx(hotelling)
        else:
            assert 0.05 * hotelling < squared < bound * hotelling


def test_a_linear_recovery_keeps_the_information_of_the_data():
    # Zero-filled at full sampling is unitary: channels matched to a disc lose little of the bound.
    chain = Chain(acquire(phantom((4, 64, 48)), full((64,)), sigma=0.05), "zero-filled")
    spectrum = Spectrum(0.02, 1 / 64, 3.0)
    seen = hotelling_observer(
        chain, Task("detection", 4.0, 0.03), spectrum, (1.0, 1.0), (30, 24), images=1200
    )
    assert seen.efficiency == pytest.approx(0.9, abs=0.2)
    assert seen.efficiency_low < 1.0
    assert seen.efficiency_low <= seen.efficiency <= seen.efficiency_high
    assert seen.images == 1200


def test_efficiency_uses_the_data_of_channels():
    held = acquire(phantom((2, 32, 32)), full((32,)), sigma=0.05, sensitivities=coils(32, 32))
    chain = Chain(held, "zero-filled")
    spectrum = Spectrum(0.02, 1 / 32, 3.0)
    task = Task("detection", 4.0, 0.05)
    seen = hotelling_observer(chain, task, spectrum, (1.0, 1.0), (16, 16), images=80)
    direct, _ = detectability(
        np.ones((1, 32, 32), bool),
        task.kspace((32, 32), (1.0, 1.0), (16, 16))[None],
        spectrum.on_grid((32, 32), (1.0, 1.0)),
        chain.sigma,
        coils(32, 32)[0],
    )
    assert seen.ideal == pytest.approx(np.sqrt(direct[0, 0]), rel=1e-3)


def test_bad_input():
    task = Task("detection", 3.0)
    with pytest.raises(QualityError, match=r"sigma = 0\.0"):
        ideal_observer([full((8,))], [task], (8, 8), MM, 0.0, SPECTRUM)
    with pytest.raises(QualityError, match=r"grid \(8,\).*\(9, 8\)"):
        ideal_observer([full((8,))], [task], (9, 8), MM, 0.1, SPECTRUM)
    with pytest.raises(QualityError, match=r"Sensitivities of shape \(2, 4, 4\)"):
        ideal_observer(
            [full((8,))], [task], (8, 8), MM, 0.1, SPECTRUM, sensitivities=np.ones((2, 4, 4))
        )
    with pytest.raises(QualityError, match="no task 'seek'"):
        Task("seek", 1.0)
    with pytest.raises(QualityError, match=r"size -1\.0 mm"):
        Task("detection", -1.0)
    with pytest.raises(QualityError, match="No background spectrum can be fitted"):
        fit_spectrum(np.zeros((1, 32, 32)), MM)
    with pytest.raises(QualityError, match="differ in shape"):
        fit_spectrum(np.ones((1, 32, 32)), MM, mask=np.ones((1, 2, 2), bool))
    chain = Chain(acquire(phantom((1, 32, 32))), "zero-filled")
    with pytest.raises(QualityError, match="cannot judge the task 'two-against-one'"):
        hotelling_observer(chain, Task("two-against-one", 3.0), SPECTRUM, MM, (16, 16))
    with pytest.raises(QualityError, match="10 images are too few"):
        hotelling_observer(chain, task, SPECTRUM, MM, (16, 16), images=10)
    with pytest.raises(QualityError, match=r"site \(50, 16\) lies outside"):
        hotelling_observer(chain, task, SPECTRUM, MM, (50, 16))
