"""Scores against formulas, published constants and scikit-image."""

import numpy as np
import pytest
from skimage.metrics import (
    normalized_root_mse,
    peak_signal_noise_ratio,
    structural_similarity,
)

from mrics.errors import QualityError
from mrics.quality import error_maps, score, score_planes
from mrics.quality.detail import log_filter, log_kernel
from mrics.quality.similarity import ssim_map, window_taps


def textured_pair(shape=(3, 40, 33), seed=0):
    rng = np.random.default_rng(seed)
    reference = rng.random(shape) + np.linspace(0, 2, shape[-1])
    return reference + 0.1 * rng.standard_normal(shape), reference


@pytest.mark.parametrize("shape", [(3, 40, 33), (1, 11, 64)])
def test_ssim_map_equals_scikit_image(shape):
    # scikit-image with the settings of Wang et al. 2004 (its defaults differ).
    image, reference = (np.abs(a) for a in textured_pair(shape))
    for a, b in zip(image, reference, strict=True):
        _, wanted = structural_similarity(
            a,
            b,
            gaussian_weights=True,
            sigma=1.5,
            use_sample_covariance=False,
            data_range=2.5,
            full=True,
        )
        np.testing.assert_allclose(ssim_map(a, b, 2.5), wanted, atol=1e-6)


def test_psnr_equals_scikit_image():
    image, reference = (np.abs(a) for a in textured_pair())
    wanted = peak_signal_noise_ratio(reference, image, data_range=reference.max())
    assert score(image, reference)["psnr"] == pytest.approx(wanted, abs=1e-9)


@pytest.mark.parametrize(
    ("x", "y", "wanted"), [(0.5, 0.6, 0.983609), (0.0, 0.1, 0.009901), (1.0, 1.0, 1.0)]
)
def test_ssim_of_constant_planes_is_its_luminance_term(x, y, wanted):
    # (2xy + C1)/(x^2 + y^2 + C1), Wang et al. 2004 eq. 6 with no variance, L = 1.
    values = ssim_map(np.full((12, 15), x), np.full((12, 15), y), 1.0)
    np.testing.assert_allclose(values, wanted, atol=1e-6)


def test_nrmse_equals_scikit_image():
    a, b = np.random.default_rng(5).random((2, 40, 36))
    theirs = normalized_root_mse(b, a, normalization="euclidean")
    assert score(a, b)["nrmse"] == pytest.approx(theirs, rel=1e-12)


def test_ssim_window_has_the_published_centre_weight():
    # 11-tap Gaussian, sigma 1.5: centre of the 2-D window 0.0707622 (Wang et al. 2004).
    taps = window_taps()
    assert taps.size == 11
    assert taps[5] ** 2 == pytest.approx(0.0707622, abs=1e-7)


def test_ssim_is_symmetric_in_its_images():
    image, reference = (np.abs(a[0]) for a in textured_pair())
    np.testing.assert_allclose(ssim_map(image, reference, 2.0), ssim_map(reference, image, 2.0))


def test_ssim_of_an_image_against_its_complement():
    # One window of means .5, variances .25 and covariance -.25 gives -.996406 (derived from the
    # definition); a fine checkerboard has those moments to 1e-5 in every inner window.
    board = (np.indices((40, 40)).sum(axis=0) % 2).astype(float)
    inner = ssim_map(board, 1.0 - board, 1.0)[8:-8, 8:-8]
    np.testing.assert_allclose(inner, -0.996406, atol=1e-4)


@pytest.mark.parametrize(
    ("data_range", "error", "wanted"),
    [(1.0, 0.1, 20.0), (1.0, 0.05, 26.0206), (1.0, 0.01, 40.0), (255.0, 1.0, 48.1308)],
)
def test_psnr_definition(data_range, error, wanted):
    # 20 log10(L / RMSE), definition.
    reference = np.full((8, 8), data_range)
    assert score(reference - error, reference)["psnr"] == pytest.approx(wanted, abs=1e-4)


def test_nrmse_divides_by_the_norm_of_the_reference():
    # ||e|| / ||x|| of x = (0,1,2,3), y = (0,1,2,4) is 1/sqrt 14 = .267261, worked by hand.
    reference = np.array([[0.0, 1.0, 2.0, 3.0]])
    assert score(np.array([[0.0, 1, 2, 4]]), reference)["nrmse"] == pytest.approx(
        0.267261, abs=1e-6
    )
    assert score(np.zeros((1, 4)), reference)["nrmse"] == 1.0


def test_log_kernel_has_its_published_form():
    # 15 x 15 Laplacian of Gaussian, sigma 1.5 (Ravishankar and Bresler 2011; form from memory),
    # numbers computed from the closed form.
    kernel = log_kernel()
    assert kernel.shape == (15, 15)
    assert kernel[7, 7] == pytest.approx(-0.0628760, abs=1e-7)
    assert kernel[7, 8] == pytest.approx(-0.0391589, abs=1e-7)
    assert np.linalg.norm(kernel) == pytest.approx(0.118205, abs=1e-6)
    assert kernel.sum() == pytest.approx(0.0, abs=1e-14)


def test_log_filter_of_an_impulse_is_the_kernel():
    plane = np.zeros((31, 33))
    plane[15, 16] = 1.0
    wanted = np.zeros_like(plane)
    wanted[8:23, 9:24] = log_kernel()
    np.testing.assert_allclose(log_filter(plane), wanted, atol=1e-15)


@pytest.mark.parametrize("shape", [(20, 27), (4, 5), (1, 9)])
def test_log_filter_equals_a_direct_convolution(shape):
    # scipy.ndimage.convolve with mirrored edges, also on planes smaller than the kernel.
    from scipy.ndimage import convolve

    plane = np.random.default_rng(3).random(shape)
    np.testing.assert_allclose(
        log_filter(plane), convolve(plane, log_kernel(), mode="reflect"), atol=1e-14
    )


def test_hfen_from_its_definition():
    from scipy.ndimage import convolve

    image, reference = (np.abs(a) for a in textured_pair())
    filtered = [
        np.stack([convolve(p, log_kernel(), mode="reflect") for p in stack])
        for stack in (image, reference)
    ]
    mask = reference > 1.0
    wanted = np.linalg.norm((filtered[0] - filtered[1])[mask]) / np.linalg.norm(filtered[1][mask])
    assert score(image, reference, mask)["hfen"] == pytest.approx(wanted, rel=1e-10)


def test_scores_of_an_exact_image():
    _, reference = textured_pair()
    assert score(reference, reference) == {
        "nrmse": 0.0,
        "psnr": np.inf,
        "ssim": pytest.approx(1.0, abs=1e-12),
        "hfen": 0.0,
    }


def test_voxels_outside_the_mask_do_not_count_in_nrmse_and_psnr():
    image, reference = textured_pair()
    mask = np.zeros(reference.shape, bool)
    mask[:, 5:30, 4:20] = True
    spoiled = np.where(mask, image, image + 50.0)
    clean, after = score(image, reference, mask), score(spoiled, reference, mask)
    assert after["nrmse"] == clean["nrmse"]
    assert after["psnr"] == clean["psnr"]


def test_data_range_is_the_reference_maximum_in_the_mask_of_the_whole_volume():
    image, reference = textured_pair()
    reference = np.abs(reference)
    reference[2, 3, 3] = 100.0
    mask = np.ones(reference.shape, bool)
    mask[2, 3, 3] = False
    largest = reference[mask].max()
    rmse = np.sqrt(np.mean((np.abs(image) - reference)[mask] ** 2))
    wanted = 20 * np.log10(largest / rmse)
    assert score(image, reference, mask)["psnr"] == pytest.approx(wanted, abs=1e-9)


def test_phase_errors_count_in_the_complex_score_alone():
    _, reference = textured_pair()
    reference = np.abs(reference) * np.exp(0.3j)
    turned = reference * np.exp(0.2j)
    scores = score(turned, reference)
    assert scores["nrmse"] == pytest.approx(0.0, abs=1e-12)
    # |exp(0.2i) - 1| = 2 sin 0.1
    assert scores["nrmse_complex"] == pytest.approx(2 * np.sin(0.1), rel=1e-9)
    assert "nrmse_complex" not in score(np.abs(turned), reference)


def test_single_precision_agrees_with_double():
    image, reference = textured_pair()
    double = score(image + 0.1j, reference + 0j)
    single = score((image + 0.1j).astype(np.complex64), (reference + 0j).astype(np.complex64))
    for name, value in double.items():
        assert single[name] == pytest.approx(value, rel=1e-5), name


def test_a_plane_is_a_stack_of_one():
    image, reference = textured_pair()
    assert score(image[0], reference[0]) == score(image[:1], reference[:1])


def test_plane_scores_combine_to_the_scores_of_the_stack():
    image, reference = textured_pair()
    mask = reference > 0.8
    planes = score_planes(image, reference, mask)
    counts = mask.sum(axis=(1, 2))
    whole = score(image, reference, mask)
    assert np.average([p["ssim"] for p in planes], weights=counts) == pytest.approx(whole["ssim"])
    energy = [np.sum(r[m] ** 2) for r, m in zip(reference, mask, strict=True)]
    mean_square = np.average(np.square([p["nrmse"] for p in planes]), weights=energy)
    assert np.sqrt(mean_square) == pytest.approx(whole["nrmse"])


def test_plane_scores_use_one_data_range():
    image, reference = textured_pair()
    given = score_planes(image[:1], reference[:1], None, data_range=np.abs(reference).max())
    assert given[0] == score_planes(image, reference)[0]


def test_planes_without_mask_voxels_have_no_scores():
    image, reference = textured_pair()
    mask = np.ones(reference.shape, bool)
    mask[1] = False
    planes = score_planes(image, reference, mask)
    assert set(planes[1].values()) == {None}
    assert planes[0]["nrmse"] is not None


def test_a_plane_with_zero_reference_has_no_relative_scores():
    image, reference = textured_pair()
    reference[1] = 0.0
    plane = score_planes(image, reference)[1]
    assert plane["nrmse"] is None
    assert plane["hfen"] is None
    assert plane["psnr"] < 30.0


def test_error_maps():
    image = np.array([[1 + 1j, -2.0], [0.0, 3j]])
    reference = np.array([[1 - 1j, 1.0], [2.0, 3j]])
    maps = error_maps(image, reference)
    np.testing.assert_allclose(maps.magnitude, [[0, 1], [-2, 0]], atol=1e-15)
    np.testing.assert_allclose(maps.complex, [[2, 3], [2, 0]], atol=1e-15)
    assert error_maps(image.astype(np.complex64), reference.astype(np.complex64)).complex.dtype == (
        np.float32
    )


def test_shapes_that_differ_are_named():
    with pytest.raises(QualityError, match=r"\(3, 40, 33\) and \(40, 33\)"):
        score(np.ones((3, 40, 33)), np.ones((40, 33)))
    with pytest.raises(QualityError, match=r"Mask and image differ in shape: \(2, 2\) and"):
        score(np.ones((3, 3)), np.ones((3, 3)), np.ones((2, 2), bool))


def test_bad_images_are_refused():
    ones = np.ones((4, 4))
    with pytest.raises(QualityError, match="reference is zero all over the mask"):
        score(ones, np.zeros((4, 4)))
    with pytest.raises(QualityError, match="mask holds no voxel"):
        score(ones, ones, np.zeros((4, 4), bool))
    with pytest.raises(QualityError, match=r"shape \(4,\) are neither"):
        score(ones[0], ones[0])
    spoiled = ones.copy()
    spoiled[1, 2] = np.nan
    with pytest.raises(QualityError, match=r"1 values that are not finite(.|\n)*\(1, 2\)"):
        score(spoiled, ones)
    with pytest.raises(QualityError, match="data range is 0"):
        score_planes(ones, ones, None, data_range=0.0)
