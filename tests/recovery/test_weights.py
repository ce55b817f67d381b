"""Weights that choose themselves: the risks, the search, the words of the settings."""

from dataclasses import replace

import numpy as np
import pytest
from invented_planes import blobs
from scipy import integrate, stats

from mrics.encoding import (
    compress,
    estimate_sigma,
    some_planes,
    undersample,
    with_sensitivities,
)
from mrics.errors import RecoveryError
from mrics.numerics import centred_ifft
from mrics.recovery import METHODS, frozen, recover, risk
from mrics.recovery.fields import WEIGHT_WORDS
from mrics.recovery.settings import SETTINGS
from mrics.recovery.weights import LEAST, MOST, search_weight
from mrics.sampling import draw_pattern

# Low rank needs frames, which its own tests have; the combined method is the sum of two of these.
ELSEWHERE = ("low-rank", "wavelet+variation")
WEIGHTED = sorted(m for m in METHODS if hasattr(SETTINGS[m], "weight") and m not in ELSEWHERE)


def shrunk(acquisition, threshold):
    """Soft threshold of real and imaginary k-space parts on their own: closed-form risk."""
    parts = np.ascontiguousarray(acquisition.kspace[:, 0]).view(float)
    kept = np.sign(parts) * np.maximum(np.abs(parts) - threshold, 0)
    return centred_ifft(kept.view(complex))


def noise_only(mean, sigma, shape=(1, 64, 64), seed=0):
    """Fully sampled k-space whose every part is ``mean`` plus noise."""
    pattern = draw_pattern((shape[1],), acceleration=1, calibration=8)
    held = undersample(np.zeros(shape, complex), pattern, sigma=sigma, seed=seed)
    return replace(held, kspace=held.kspace + mean * (1 + 1j))


@pytest.mark.parametrize(
    ("mean", "threshold", "expected"),
    # Donoho & Johnstone 1995, JASA 90:1200-1224: risk of the soft threshold at sigma = 1; at mean 0
    # 2 [(1 + t^2) Phi(-t) - t phi(t)], at mean 2 by quadrature.
    [(0, 0.5, 0.419279), (0, 1, 0.150680), (0, 2, 0.011537), (2, 1, 1.593130)],
)
def test_probed_risk_is_the_closed_form_of_the_soft_threshold(mean, threshold, expected):
    def loss(x):
        kept = np.sign(x) * max(abs(x) - threshold, 0)
        return (kept - mean) ** 2 * stats.norm.pdf(x - mean)

    points = [-threshold, threshold]
    risk_ = integrate.quad(loss, mean - 12, mean + 12, points=points, limit=200)[0]
    assert risk_ == pytest.approx(expected, abs=2e-6)
    sigma = 3.0
    held = noise_only(mean * sigma, sigma)
    function = risk.stein_risk(held, lambda a, w: shrunk(a, w * sigma), sigma)
    samples = 2 * held.kspace.size
    probed = function(threshold) / (samples * sigma**2)
    # Stein's closed form: N sigma^2 - 2 sigma^2 #{|x| <= t} + sum min(|x|, t)^2.
    x = np.ascontiguousarray(held.kspace).view(float) / sigma
    closed = np.mean(1 - 2 * (np.abs(x) <= threshold) + np.minimum(np.abs(x), threshold) ** 2)
    # The probe's step of 0.1 sigma rounds the corner of the threshold off.
    assert probed == pytest.approx(closed, abs=0.03)
    assert closed == pytest.approx(expected, abs=4 * np.sqrt(6 / samples))


@pytest.mark.parametrize(("method", "channels"), [("wavelet", 1), ("variation", 2)])
def test_stein_risk_is_the_error_of_the_measured_samples(method, channels):
    """Mean over 50 noise draws within 3 standard errors, random shifts frozen (Ramani 2008)."""
    truth = blobs((1, 40, 48))
    sigma = 0.05
    pattern = draw_pattern((40,), acceleration=2.5, calibration=8, seed=3)
    maps = psi = None
    if channels == 2:
        ramp = np.linspace(0.2, 1, 48)
        maps = np.stack([np.broadcast_to(ramp, (40, 48)), 1j * np.broadcast_to(1 - ramp, (40, 48))])
        maps = maps[None]
        psi = np.array([[1, 0.3j], [-0.3j, 1.4]])
    clean = undersample(truth, pattern, sensitivities=maps, covariance=psi)

    def run(acquisition, weight):
        held = replace(acquisition, sigma_added=sigma)
        return recover(held, method, weight=weight, iterations=20, tolerance=1e-9).image

    differences = []
    for seed in range(50):
        held = undersample(
            truth, pattern, sigma=sigma, seed=seed, sensitivities=maps, covariance=psi
        )
        estimate = risk.stein_risk(held, run, sigma, seed)(1.0)
        differences.append(estimate - risk.misfit(clean, run(held, 1.0)))
    mean, error = np.mean(differences), np.std(differences, ddof=1) / np.sqrt(50)
    assert abs(mean) < 3 * error
    size = 2 * sigma**2 * risk.sample_count(clean)
    assert error < 0.05 * size, "so that the check can fail"


def test_misfit_counts_acquired_samples_only(lines):
    image = np.zeros(lines.shape, complex)
    assert risk.misfit(lines, image) == pytest.approx(np.sum(np.abs(lines.kspace) ** 2))
    weights = np.zeros((1, 40, 1))
    line = int(np.flatnonzero(lines.mask[0, :, 0])[0])
    weights[0, line] = 2
    expected = 2 * np.sum(np.abs(lines.kspace[:, :, line]) ** 2)
    assert risk.misfit(lines, image, weights) == pytest.approx(expected)
    assert risk.sample_count(lines) == 4 * 16 * 48


@pytest.mark.parametrize("data", ["lines", "points"])
def test_held_out_samples_are_a_twentieth_outside_the_centre(data, request):
    held = request.getfixturevalue(data)
    split = risk.split_samples(held)
    mask = held.mask[held.pattern_index]
    assert not (split.kept.mask & split.held.mask).any()
    whole = np.broadcast_to(mask, held.shape)
    np.testing.assert_array_equal(split.kept.mask | split.held.mask, whole)
    np.testing.assert_array_equal(split.kept.kspace + split.held.kspace, held.kspace)
    size = held.calibration[0]
    box = slice(20 - size // 2, 20 - size // 2 + size)
    inner = split.held.mask[:, box] if data == "lines" else split.held.mask[:, box, 19:29]
    assert not inner.any()
    free = np.broadcast_to(mask, held.shape).sum() - 4 * size * (48 if data == "lines" else size)
    assert split.held.mask.sum() == pytest.approx(0.05 * free, rel=0.02)
    different = {split.held.mask[plane].tobytes() for plane in range(4)}
    assert len(different) > 1


def test_held_out_samples_stand_for_all_that_was_not_acquired(points):
    """Sums over k-space of a known map come out right over many splits and patterns."""
    u, v = np.mgrid[-20:20, -24:24]
    size = 1 / (4 + np.hypot(u, v))
    ratios = []
    for seed in range(30):
        pattern = draw_pattern((40, 48), acceleration=3, calibration=10, seed=seed)
        held = undersample(blobs(), pattern)
        split = risk.split_samples(held, seed)
        estimate = (split.unseen * size * split.held.mask).sum()
        unseen = 4 * (size * ~held.mask[0]).sum()
        assert split.unseen.sum() == pytest.approx(4 * (~held.mask[0]).sum())
        ratios.append(estimate / unseen)
    assert np.mean(ratios) == pytest.approx(1, abs=0.05)


def test_regular_patterns_have_one_chance_outside_the_centre():
    pattern = draw_pattern((40,), pattern="equispaced", acceleration=2, calibration=8)
    held = undersample(blobs(), pattern)
    split = risk.split_samples(held)
    missing = 48 * (~held.mask[0]).sum()
    assert split.unseen[split.held.mask] == pytest.approx(missing / split.held.mask[0].sum())


@pytest.mark.parametrize("least", [0.031, 0.2, 0.77, 9.0])
def test_search_finds_the_least_on_the_grid(least):
    seen = []

    def parabola(weight):
        seen.append(weight)
        return 5 + np.log(weight / least) ** 2

    weight, trials = search_weight(parabola)
    assert weight == pytest.approx(least, rel=0.01)
    assert trials == len(seen) == len(set(seen)) <= 9


def test_search_stays_in_its_range():
    assert search_weight(lambda w: w)[0] == LEAST
    assert search_weight(lambda w: -w)[0] == MOST
    assert search_weight(lambda w: 1.0)[0] == 0.2


@pytest.mark.parametrize("method", WEIGHTED)
@pytest.mark.parametrize("word", [w for w in WEIGHT_WORDS if w != "trained"])
def test_every_rule_names_itself_and_its_cost(points, method, word):
    result = recover(points, method, weight=word, reference=blobs(), iterations=15)
    rule = result.certificate.weight_rule
    assert rule.startswith(word)
    assert "trials" in rule
    assert LEAST <= result.certificate.weight <= MOST
    again = recover(points, method, weight=result.certificate.weight, iterations=15)
    np.testing.assert_array_equal(again.image, result.image)
    assert again.certificate.weight_rule == "given"


@pytest.mark.parametrize("method", WEIGHTED)
def test_best_is_no_worse_than_any_number(points, method):
    truth = blobs()

    def error(image):
        return np.sum((np.abs(image) - np.abs(truth)) ** 2)

    best = recover(points, method, weight="best", reference=truth, iterations=30)
    assert "answer in hand" in best.certificate.weight_rule
    others = [
        error(recover(points, method, weight=w, iterations=30).image) for w in (0.05, 0.2, 0.8, 3.2)
    ]
    assert error(best.image) <= 1.01 * min(others)


def test_best_counts_the_mask_alone(points):
    truth = blobs()
    wrong = truth.copy()
    wrong[:, :, 24:] = 50
    mask = np.zeros(truth.shape, bool)
    mask[:, :, :24] = True
    one = recover(points, "variation", weight="best", reference=truth, mask=mask)
    two = recover(points, "variation", weight="best", reference=wrong, mask=mask)
    assert one.certificate.weight == two.certificate.weight


@pytest.mark.parametrize("method", WEIGHTED)
def test_scaling_data_and_sigma_keeps_the_weight(lines, method):
    """Also where sigma is estimated from the data."""
    factor = 3e7 * np.exp(0.7j)
    scaled = replace(lines, kspace=factor * lines.kspace, sigma_added=abs(factor) * 0.02)
    for word in ("auto", "sure", "discrepancy"):
        one, two = (recover(a, method, weight=word, iterations=10) for a in (lines, scaled))
        assert one.certificate.weight == two.certificate.weight
    found = [
        recover(replace(a, sigma_added=0.0, sigma_scan=estimate_sigma(a)), method, iterations=10)
        for a in (lines, scaled)
    ]
    assert found[0].certificate.weight == found[1].certificate.weight
    np.testing.assert_allclose(
        found[1].image, factor * found[0].image, rtol=0, atol=1e-8 * abs(found[1].image).max()
    )


def test_planes_without_signal_have_no_say(points):
    kspace = points.kspace.copy()
    kspace[1] = 0
    holed = recover(replace(points, kspace=kspace), "variation")
    rest = recover(some_planes(points, [0, 2, 3]), "variation")
    assert holed.certificate.weight == rest.certificate.weight
    np.testing.assert_array_equal(holed.image[[0, 2, 3]], rest.image)


def test_a_full_pattern_is_judged_by_its_noise():
    pattern = draw_pattern((40,), acceleration=1, calibration=8)
    held = undersample(blobs(), pattern, sigma=0.1, seed=1)
    found = recover(held, "variation")
    assert "Stein" in found.certificate.weight_rule
    error = np.abs(found.image - blobs())
    plain = np.abs(recover(held, "zero-filled").image - blobs())
    assert np.sum(error**2) < 0.5 * np.sum(plain**2)


def test_discrepancy_leaves_the_noise(lines):
    found = recover(lines, "variation", weight="discrepancy")
    noise = 2 * lines.sigma**2 * risk.sample_count(lines)
    assert risk.misfit(lines, found.image) == pytest.approx(noise, rel=0.1)


@pytest.mark.parametrize(
    ("settings", "match"),
    [
        ({"weight": "best"}, r"fully sampled image, and got none"),
        ({"weight": "best", "reference": np.ones((2, 40, 48))}, r"one of shape \(2, 40, 48\)"),
        ({"weight": "trained"}, r"chosen by a study on its training scans"),
    ],
)
def test_words_that_cannot_be_followed_are_refused(lines, settings, match):
    with pytest.raises(RecoveryError, match=match):
        recover(lines, "wavelet", **settings)


def test_a_pattern_without_centre_is_refused(lines):
    mask = lines.mask.copy()
    mask[:, 20] = False
    holed = replace(lines, mask=mask, calibration=(0,), kspace=lines.kspace * mask[:, None])
    with pytest.raises(RecoveryError, match=r"(?s)zero frequency.*Give the weight as a number"):
        recover(holed, "wavelet")
    assert recover(holed, "wavelet", weight=0.4).image.any()
    only = np.zeros_like(lines.mask)
    only[:, 16:24] = True
    centre = replace(lines, mask=only, kspace=lines.kspace * only[:, None])
    with pytest.raises(RecoveryError, match="No sample outside the calibration region"):
        recover(centre, "wavelet")


def test_weights_freeze_for_later_recoveries(points):
    first = recover(points, "variation")
    fixed = frozen("variation", {"iterations": 50}, first.certificate)
    assert fixed == {"iterations": 50, "weight": first.certificate.weight}
    assert frozen("zero-filled", {}, first.certificate) == {}


def test_probe_reaches_the_acquired_samples_alone(points):
    probe = risk._probe(points, 0).kspace
    acquired = np.broadcast_to(points.mask[0], points.shape)
    assert not probe[:, 0][~acquired].any()
    np.testing.assert_allclose(np.abs(probe[:, 0][acquired]) ** 2, 2, rtol=1e-6)
    assert abs(np.mean(probe[:, 0][acquired] ** 2)) < 0.1, "real and imaginary part independent"


def array_data(acceleration, sigma):
    """Four channels with correlated noise, sensitivities to be estimated."""
    y, x = np.mgrid[-1:1:40j, -1:1:48j]
    places = [(1, 1), (1, -1), (-1, 1), (-1, -1)]
    maps = np.array([np.exp(-((x - a) ** 2) - (y - b) ** 2 + 1j * a * y) for a, b in places])
    psi = np.eye(4) + 0.3 * (np.eye(4, k=1) + np.eye(4, k=-1))
    pattern = draw_pattern((40, 48), acceleration=acceleration, calibration=14, seed=2)
    held = undersample(
        blobs((2, 40, 48)), pattern, sigma=sigma, seed=1, sensitivities=maps[None], covariance=psi
    )
    return replace(held, sensitivities=None)


def ratio_to_best(held, reference):
    """Squared error of the magnitude at the chosen weight over that at the best one."""
    found = [recover(held, "variation", weight=w, reference=reference) for w in ("auto", "best")]
    auto, best = (np.sum((np.abs(r.image) - np.abs(reference)) ** 2) for r in found)
    return auto / best, found[0].certificate


@pytest.mark.parametrize("virtual", [None, 3])
def test_channels_with_estimated_sensitivities(virtual):
    reference = recover(array_data(1, 0.0), "zero-filled").image
    held = array_data(3, 0.05)
    if virtual is not None:
        held = compress(held, virtual, per_plane=True)
    ratio, certificate = ratio_to_best(held, reference)
    assert ratio < 1.26, "1 dB: invented discs are flatter than what the rule was measured on"
    given = recover(with_sensitivities(held), "variation").certificate
    assert given.weight == pytest.approx(certificate.weight, rel=0.01)


def test_frames_with_patterns_of_their_own():
    pattern = draw_pattern((40,), acceleration=2.5, calibration=8, seed=3, frames=2)
    held = undersample(blobs((6, 40, 48)), pattern, sigma=0.05, seed=1)
    ratio, certificate = ratio_to_best(held, blobs((6, 40, 48)))
    assert certificate.weight_rule.endswith("on 2 of 3 planes")
    assert ratio < 1.26, "1 dB, as above"
