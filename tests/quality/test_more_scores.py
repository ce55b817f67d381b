"""Multi-scale SSIM, gradient similarity, worst patches, spectral error, regions, edges."""

import numpy as np
import pytest
from scipy.ndimage import gaussian_filter
from skimage.metrics import structural_similarity

from mrics.errors import QualityError
from mrics.numerics import centred_fft, centred_ifft
from mrics.quality.edges import edge_blur, zero_fill
from mrics.quality.gradients import gradient_deviation, gradient_similarity
from mrics.quality.more_scores import MORE, more_scores_planes
from mrics.quality.multiscale import WEIGHTS, halved, ms_ssim, scale_count
from mrics.quality.patches import worst_patch
from mrics.quality.regions import bland_altman, region_statistics
from mrics.quality.spectral import spectral_error


def pair(shape=(96, 90), seed=0):
    rng = np.random.default_rng(seed)
    reference = gaussian_filter(rng.random(shape), 2.0)
    reference = (reference - reference.min()) / np.ptp(reference)
    return np.abs(reference + 0.05 * rng.standard_normal(shape)), reference


def contrast_term(x, y, span):
    """SSIM of scikit-image divided by its luminance term."""
    _, whole = structural_similarity(
        x,
        y,
        gaussian_weights=True,
        sigma=1.5,
        use_sample_covariance=False,
        data_range=span,
        full=True,
    )
    mx, my = (gaussian_filter(a, 1.5, truncate=3.5) for a in (x, y))
    c1 = (0.01 * span) ** 2
    return whole, whole * (mx**2 + my**2 + c1) / (2 * mx * my + c1)


def test_multi_scale_ssim_is_the_product_of_its_scales():
    # Wang, Simoncelli, Bovik 2003, each scale by scikit-image.
    image, reference = pair((192, 200))
    wanted, x, y = 1.0, image, reference
    assert scale_count(image.shape) == 5
    for scale, weight in enumerate(WEIGHTS):
        whole, contrast = contrast_term(x, y, 1.0)
        wanted *= (whole if scale == 4 else contrast).mean() ** (weight / sum(WEIGHTS))
        x, y = halved(x), halved(y)
    assert ms_ssim(image, reference, 1.0) == pytest.approx(wanted, abs=1e-9)


def test_multi_scale_ssim_of_equal_and_small_planes():
    _, reference = pair((20, 17))
    assert scale_count((20, 17)) == 1
    assert ms_ssim(reference, reference, 1.0) == pytest.approx(1.0)
    assert ms_ssim(1.0 - reference, reference, 1.0) == 0.0


def test_gradient_similarity_from_its_definition():
    # Xue et al. 2014: Prewitt / 3, c = 170 for a data range of 255, planes halved first.
    from scipy.ndimage import convolve

    image, reference = pair((20, 24))
    kernel = np.array([[1, 0, -1]] * 3) / 3.0
    sizes = []
    for plane in (255 * image, 255 * reference):
        small = halved(plane)
        parts = [convolve(small, k, mode="reflect") for k in (kernel, kernel.T)]
        sizes.append(np.hypot(*parts))
    wanted = (2 * sizes[0] * sizes[1] + 170) / (sizes[0] ** 2 + sizes[1] ** 2 + 170)
    np.testing.assert_allclose(gradient_similarity(image, reference, 1.0), wanted, atol=1e-12)
    assert gradient_deviation(image, reference, 1.0) == pytest.approx(wanted.std())
    assert gradient_deviation(reference, reference, 1.0) == pytest.approx(0.0, abs=1e-12)


def test_worst_patch_is_found():
    values = np.full((40, 50), 0.1)
    values[20:28, 30:38] = 1.0
    worst = worst_patch(values, None, lowest=False, size=8)
    assert worst.value == pytest.approx(1.0)
    assert worst.where == (24, 34)
    mask = np.ones(values.shape, bool)
    mask[:, 28:40] = False
    assert worst_patch(values, mask, lowest=False, size=8).value < 0.2
    assert worst_patch(-values, None, lowest=True, size=8).value == pytest.approx(-1.0)
    assert worst_patch(values, np.zeros_like(mask), lowest=True) is None


def test_more_scores_of_every_plane():
    pairs = [pair(seed=s) for s in (1, 2)]
    image, reference = (np.stack(part) for part in zip(*pairs, strict=True))
    mask = np.ones(reference.shape, bool)
    mask[0, :, :40] = False
    scores = more_scores_planes(image, reference, mask)
    span = reference[mask].max()
    assert scores[1]["ms_ssim"] == pytest.approx(ms_ssim(image[1], reference[1], span))
    rms = np.sqrt(np.mean(reference[mask] ** 2))
    whole = np.sqrt(np.mean((image[1] - reference[1]) ** 2)) / rms
    assert whole < scores[1]["nrmse_patch"] < 3 * whole
    assert scores[1]["ssim_patch"] < scores[1]["ms_ssim"]
    mask[0] = False
    assert more_scores_planes(image, reference, mask)[0] == dict.fromkeys(MORE)
    with pytest.raises(QualityError, match="patch 1 voxels"):
        more_scores_planes(image, reference, patch=1)


def test_spectral_error_finds_the_ring_that_is_wrong():
    rng = np.random.default_rng(0)
    reference = rng.standard_normal((2, 64, 64)) + 1j * rng.standard_normal((2, 64, 64))
    u = np.arange(64)
    wave = 3.0 * np.exp(2j * np.pi * 16 * u / 64)[:, None] * np.ones(64)
    found = spectral_error(reference + wave, reference, (0.5, 0.5), rings=16)
    # 16 cycles over 32 mm are 0.5 cycles per mm; Nyquist is 1.
    assert found.share.argmax() == 8
    assert found.share.max() == pytest.approx(1.0)
    assert found.frequency[8] == pytest.approx(0.53125)
    ring = np.sum(found.share > 1e-12)
    assert ring == 1
    np.testing.assert_allclose(spectral_error(1.1 * reference, reference, (1, 1)).relative, 0.1)


def test_error_in_fine_detail_is_that_of_the_outer_half():
    rng = np.random.default_rng(4)
    shape = (2, 32, 24)
    truth = centred_ifft(rng.standard_normal(shape) + 1j * rng.standard_normal(shape))
    kspace = centred_fft(truth)
    u, v = np.meshgrid((np.arange(32) - 16) / 16, (np.arange(24) - 12) / 12, indexing="ij")
    outer = np.hypot(u, v) > 0.5
    wrong = centred_ifft(np.where(outer, 0.75 * kspace, kspace))
    wrong[1] = truth[1]
    found = spectral_error(wrong, truth, (1.0, 1.3))
    np.testing.assert_allclose(found.fine, [0.25, 0.0], atol=1e-7)
    inner = spectral_error(centred_ifft(np.where(outer, kspace, 0.0)), truth, (1.0, 1.3))
    np.testing.assert_allclose(inner.fine, 0.0, atol=1e-7)


def test_spectral_error_of_magnitudes():
    _, reference = pair()
    found = spectral_error(reference * np.exp(0.4j), reference, (1.0, 1.0))
    assert found.relative.max() < 1e-12


def test_regions():
    reference = np.zeros((3, 20, 20))
    labels = np.zeros(reference.shape, int)
    labels[:, 2:8, 2:8], labels[:, 12:18, 12:18] = 1, 2
    reference[labels == 1], reference[labels == 2] = 100.0, 50.0
    rng = np.random.default_rng(0)
    image = reference + rng.normal(0, 2, reference.shape) + 1.0
    one, two = region_statistics(image, reference, labels, background=2)
    assert (one.label, two.label) == (1, 2)
    assert one.voxels == 108
    assert one.mean == pytest.approx(101.0, abs=0.8)
    assert one.reference_sd == 0.0
    assert one.contrast == pytest.approx(1.0, abs=0.05)
    assert one.reference_contrast == 1.0
    assert one.cnr == pytest.approx(25.0, rel=0.15)
    assert np.isnan(one.reference_cnr)
    assert one.agreement.planes == 3
    assert one.agreement.low < one.agreement.bias < one.agreement.high
    assert np.isnan(region_statistics(image, reference, labels)[0].contrast)


def test_uniformity():
    # 100 (1 - (max - min) / (max + min)): 1100, 900 -> 90 % (ACR guidance, formula from memory).
    image = np.full((8, 8), 1000.0)
    image[0, 0], image[1, 1] = 1100.0, 900.0
    region = region_statistics(image, image, np.ones((8, 8), int))[0]
    assert region.uniformity == pytest.approx(90.0)


def test_limits_of_agreement():
    # Bland & Altman 1986: bias +- 1.96 SD of the differences, worked by hand.
    found = bland_altman(np.array([1.0, 2.0, 4.0]), np.array([0.0, 2.0, 3.0]))
    assert found.bias == pytest.approx(2 / 3)
    assert found.high - found.bias == pytest.approx(1.96 * np.sqrt(1 / 3))
    assert np.isnan(bland_altman(np.ones(1), np.ones(1)).low)


def test_bad_labels():
    image = np.ones((4, 4))
    with pytest.raises(QualityError, match=r"label map is on another grid.*\(3, 3\) and \(4, 4\)"):
        region_statistics(image, image, np.ones((3, 3), int))
    with pytest.raises(QualityError, match="not whole numbers"):
        region_statistics(image, image, np.full((4, 4), 0.5))
    with pytest.raises(QualityError, match=r"regions \[\]"):
        region_statistics(image, image, np.zeros((4, 4), int))
    with pytest.raises(QualityError, match=r"regions \[1\]; the background label is 7"):
        region_statistics(image, image, np.ones((4, 4), int), background=7)


@pytest.mark.parametrize("shape", [(16, 12), (15, 13), (9, 16)])
def test_zero_filling_keeps_the_samples(shape):
    # Zero-filling N -> 4 N: every fourth sample is the unpadded image (DFT).
    plane = np.random.default_rng(0).standard_normal(shape)
    np.testing.assert_allclose(zero_fill(plane, 4)[::4, ::4].real, plane, atol=1e-12)


def edge_image(sigma_mm, angle=20.0, shape=(64, 64), voxel=(1.0, 0.8)):
    """A straight edge with Gaussian blur, both levels flat, fading out at the border."""
    from scipy.stats import norm

    u, v = np.meshgrid(
        *((np.arange(n) - n // 2) * s for n, s in zip(shape, voxel, strict=True)), indexing="ij"
    )
    across = u * np.cos(np.deg2rad(angle)) + v * np.sin(np.deg2rad(angle))
    fade = np.exp(-((np.hypot(u, v) / 28.0) ** 16))
    return (0.3 + norm.cdf(across / sigma_mm)) * fade


@pytest.mark.parametrize("angle", [0.0, 20.0, 90.0])
def test_edges_of_known_blur(angle):
    # 2.563103 sigma, normal distribution; within 1 %.
    sharp, blurred = edge_image(1.0, angle), edge_image(1.6, angle)
    found = edge_blur(
        blurred, sharp, (1.0, 0.8), edges=np.array([[0, 32, 32, angle]]), reach_mm=8.0
    )
    assert found.reference_mm[0] == pytest.approx(2.563103, rel=0.01)
    assert found.width_mm[0] == pytest.approx(1.6 * 2.563103, rel=0.01)
    assert found.ratio == pytest.approx(1.6, rel=0.01)


def test_edges_are_found():
    sharp, blurred = edge_image(1.0), edge_image(1.5)
    mask = np.zeros(sharp.shape, bool)
    mask[18:46, 18:46] = True
    found = edge_blur(blurred, sharp, (1.0, 0.8), mask=mask, reach_mm=8.0)
    assert len(found.edges) >= 1
    np.testing.assert_allclose(found.edges[:, 3], 20.0, atol=3.0)
    assert found.ratio == pytest.approx(1.5, rel=0.03)


def test_bad_edges():
    image = np.ones((32, 32))
    with pytest.raises(QualityError, match="No edge with flat ground"):
        edge_blur(image, image, (1.0, 1.0))
    with pytest.raises(QualityError, match=r"outside a stack of shape \(1, 32, 32\)"):
        edge_blur(image, image, (1.0, 1.0), edges=np.array([[0, 40, 1, 0]]))
