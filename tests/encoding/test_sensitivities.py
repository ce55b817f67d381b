"""Estimated sensitivities against the true ones, and the eigenvector loop against LAPACK."""

from pathlib import Path

import numpy as np
import pytest
from receive import regular, scene
from scipy.ndimage import binary_erosion

from mrics.encoding import blocks, estimate_sensitivities, undersample, with_sensitivities
from mrics.encoding._eigen import dominant
from mrics.encoding.coils import coils_for_scan
from mrics.encoding.espirit import eigen_maps, window_correlations, window_matrix
from mrics.errors import AcquisitionError
from mrics.numerics import centred_fft
from mrics.recovery import recover
from mrics.sampling.pattern import Pattern
from mrics.scan import Axes, body_mask, read_scan


def map_error(found, true, where):
    """RMS error relative to unit-norm maps, phase aligned per voxel."""
    true = true / np.sqrt((np.abs(true) ** 2).sum(axis=0))
    turn = (found.conj() * true).sum(axis=0)
    aligned = found * np.divide(turn, np.abs(turn), out=np.ones_like(turn), where=turn != 0)
    gap = (np.abs(aligned - true) ** 2).sum(axis=0)[where]
    return float(np.sqrt(gap.mean()))


def acquired(snr, planes=1, u=96, v=96, pattern=None, **more):
    maps, inside, images = scene(u, v, planes=planes)
    sigma = np.abs(images[0][inside]).mean() / snr if snr else 0.0
    pattern = pattern or regular((u, v), (2, 2), 24)
    made = undersample(images, pattern, sigma, 3, sensitivities=maps[None], **more)
    rim = binary_erosion(inside, iterations=2)
    object.__setattr__(made, "sensitivities", None)
    return made, maps, rim, inside


@pytest.mark.parametrize(("snr", "limit"), [(0, 0.02), (30, 0.05)])
@pytest.mark.parametrize("method", ["espirit", "adaptive"])
def test_maps_are_the_true_ones_up_to_phase(snr, limit, method):
    data, true, rim, inside = acquired(snr)
    maps, values = estimate_sensitivities(data, method=method)
    if method == "adaptive":
        limit = 0.12  # a local average cannot resolve maps at the object's edge
    assert map_error(maps[0, 0], true, rim) < limit
    norm = (np.abs(maps[0, 0]) ** 2).sum(axis=0)
    np.testing.assert_allclose(norm[rim], 1.0, atol=1e-6)
    if method == "espirit":
        # Source: P12, Uecker 2014: eigenvalue 1 inside the object.
        assert values[0, 0][inside].min() > 0.99
        assert values[0, 0].min() < 0.5


@pytest.mark.parametrize(("snr", "limit"), [(0, 0.02), (30, 0.05)])
@pytest.mark.parametrize("method", ["espirit", "adaptive"])
def test_maps_of_simulated_loops_on_the_sample_phantom(snr, limit, method):
    # The stated bars: RMS error over the object less a rim of 2 voxels, true maps of unit norm.
    stem = str(Path(__file__).parents[2] / "sample_data" / "sub-a_acq-tse2d_part-{}_PDw.nii.gz")
    scan, axes = read_scan(stem.format("real"), imaginary=stem.format("imag")), Axes("i", "j")
    true = coils_for_scan(scan, axes, number=8).sensitivities[8:9]
    image, body = axes.to_planes(scan.data)[8:9], axes.to_planes(body_mask(scan))[8]
    sigma = np.abs(image[0][body]).mean() / snr if snr else 0.0
    pattern = regular((image.shape[1],), (2,), 24)
    data = undersample(image, pattern, sigma, 1, sensitivities=true)
    object.__setattr__(data, "sensitivities", None)
    found, _ = estimate_sensitivities(data, method=method)
    assert map_error(found[0, 0], true[0], binary_erosion(body, iterations=2)) < limit


def test_calibration_matrix_has_the_published_size():
    # Source: P12: 24 x 24 samples, 6 x 6 window, 8 channels: 361 x 288.
    samples = np.zeros((8, 24, 24), complex)
    assert window_matrix(samples, (6, 6)).shape == (361, 288)


def test_window_matrix_rows_are_windows():
    samples = np.arange(2 * 4 * 5).reshape(2, 4, 5).astype(complex)
    rows = window_matrix(samples, (2, 3))
    np.testing.assert_array_equal(rows[4], samples[:, 1:3, 1:4].ravel())


@pytest.mark.parametrize("channels", [2, 5, 14])
def test_leading_eigenvectors_are_those_of_lapack(channels):
    # Source: numpy.linalg.eigh (LAPACK).
    generator = np.random.default_rng(channels)
    half = generator.standard_normal((6, 7, channels, 2)) + 1j * generator.standard_normal(
        (6, 7, channels, 2)
    )
    half[..., 0] *= 2
    matrices = half @ half.conj().swapaxes(-1, -2)
    upper = np.triu_indices(channels)
    packed = np.ascontiguousarray(matrices[..., upper[0], upper[1]].swapaxes(1, 2))
    maps, values = np.empty((2, channels, 6, 7), complex), np.empty((2, 6, 7))
    reference = np.ones(channels, complex)
    dominant(packed, reference, maps, values)
    true_values, true_vectors = np.linalg.eigh(matrices)
    for s in range(2):
        np.testing.assert_allclose(values[s], true_values[..., -1 - s], rtol=1e-6)
        overlap = (true_vectors[..., -1 - s].conj() * maps[s].transpose(1, 2, 0)).sum(-1)
        np.testing.assert_allclose(np.abs(overlap), 1.0, atol=1e-6)
        turn = maps[s].sum(axis=0)
        np.testing.assert_allclose(turn.imag, 0.0, atol=1e-9)
        assert (turn.real > 0).all()


def test_pixel_matrix_is_the_written_sum():
    # Source: the averaged projection of the module's text, applied to k-space window by window.
    generator = np.random.default_rng(4)
    channels, n, k = 2, 8, 3
    samples = generator.standard_normal((channels, n, n)) + 1j * generator.standard_normal(
        (channels, n, n)
    )
    smooth = centred_fft(np.ones((channels, n, n)) * np.array([1.0, 2.0])[:, None, None])
    spread = window_correlations(smooth + 1e-3 * samples, (k, k))
    matrix = window_matrix(smooth + 1e-3 * samples, (k, k))
    _, s, right = np.linalg.svd(matrix)
    basis = right[: (s > 0.003 * s[0]).sum()].T
    projector = basis @ basis.conj().T
    # One pixel's matrix by a plane wave through the periodic average of projected windows.
    r = np.array([1, -2])
    wave = np.exp(-2j * np.pi * (np.arange(k)[:, None] * r[0] + np.arange(k)[None] * r[1]) / n)
    expected = (
        np.einsum(
            "cijdkl,ij,kl->cd",
            projector.reshape(channels, k, k, channels, k, k),
            wave.conj(),
            wave,
        )
        / k**2
    )
    from mrics.encoding.espirit import waves

    u = waves(n, k)[n // 2 + r[0]]
    v = waves(n, k)[n // 2 + r[1]]
    np.testing.assert_allclose(np.einsum("cdij,i,j->cd", spread, u, v), expected, atol=1e-10)


def test_two_map_sets_where_the_object_folds_in_the_field_of_view():
    # Source: Uecker 2014: an object wider than the field of view has a second eigenvalue of 1.
    maps, inside, images = scene(192, 96)
    folded = (maps * images[0]).reshape(8, 2, 96, 96).sum(axis=1)
    kspace = centred_fft(folded)[:, 36:60, 36:60]
    spread = window_correlations(kspace, (6, 6))
    _, values = eigen_maps(spread, (96, 96), 2, np.ones(8))
    both = inside[:96] & inside[96:]
    one = binary_erosion(~both, iterations=12) & (inside[:96] | inside[96:])
    assert both.sum() > 500
    assert np.median(values[1][both]) > 0.97
    assert np.median(values[1][one]) < 0.8
    assert values[0][both].min() > 0.98


def test_whole_volume_calibration_agrees_with_the_true_maps():
    planes = 32
    maps, inside, images = scene(64, 64, channels=4)
    profile = np.cos(np.linspace(-1.2, 1.2, planes)) ** 2
    stack = images * profile[:, None, None]
    pattern = regular((64, 64), (2, 2), 16)
    data = undersample(stack, pattern, 0.01, 1, sensitivities=maps[None], axes=Axes("i", "j", "k"))
    object.__setattr__(data, "sensitivities", None)
    found, values = estimate_sensitivities(data, whole_volume=True, kernel=5)
    rim = binary_erosion(inside, iterations=2)
    for plane in (4, 16, 28):
        assert map_error(found[plane, 0], maps, rim) < 0.03
        assert values[plane, 0][rim].min() > 0.97


def test_kept_maps_are_those_of_the_blocks(tmp_path):
    psi = np.eye(8) + 0.4 * (np.eye(8, k=1) + np.eye(8, k=-1))
    data, _, _, _ = acquired(40, planes=3, u=48, v=48, covariance=psi)
    kept = with_sensitivities(data, scratch=tmp_path / "maps.npy")
    assert isinstance(kept.sensitivities, np.memmap)
    assert "estimated from the calibration region" in kept.notes[-1]
    for (_, one, _), (_, two, _) in zip(blocks(data), blocks(kept), strict=True):
        np.testing.assert_allclose(one.sensitivities, two.sensitivities, atol=1e-6)


def test_large_maps_are_kept_in_a_file(monkeypatch):
    data, _, _, _ = acquired(40, u=48, v=48)
    small = with_sensitivities(data).sensitivities
    assert not isinstance(small, np.memmap)
    monkeypatch.setattr("mrics.encoding.sensitivities._IN_MEMORY", 1000)
    large = with_sensitivities(data).sensitivities
    assert isinstance(large, np.memmap)
    np.testing.assert_array_equal(large, small)


def test_recovery_with_estimated_maps_follows_the_combined_image():
    # The estimate has unit norm, so the image is the true one up to the maps' phase.
    data, _, rim, _ = acquired(0)
    image = recover(data, "least-squares", tolerance=1e-8).image[0]
    true = scene(96, 96)[2][0]
    gap = np.abs(np.abs(image) - np.abs(true))[rim]
    assert np.sqrt((gap**2).mean() / (np.abs(true[rim]) ** 2).mean()) < 0.01


def test_refusals():
    data, _, _, _ = acquired(0)
    with pytest.raises(AcquisitionError, match="no sensitivity estimation called 'best'"):
        estimate_sensitivities(data, method="best")
    with pytest.raises(AcquisitionError, match="3 map sets"):
        estimate_sensitivities(data, sets=3)
    with pytest.raises(AcquisitionError, match="kernel of 1 samples is too small"):
        estimate_sensitivities(data, kernel=1)
    with pytest.raises(AcquisitionError, match="takes all planes"):
        estimate_sensitivities(data, slice(0, 1), whole_volume=True)
    small, _, _, _ = acquired(0, pattern=regular((96, 96), (2, 2), 6))
    with pytest.raises(AcquisitionError, match=r"6 x 6 samples is too small for a 6 x 6 kernel"):
        estimate_sensitivities(small)
    with pytest.raises(AcquisitionError, match=r"at least 8 x 8 samples"):
        estimate_sensitivities(small)
    holes = regular((96, 96), (2, 2), 24)
    holes.mask[40, 41] = False
    with pytest.raises(AcquisitionError, match=r"undersampled: 1 of 576 .* index \(40, 41\)"):
        estimate_sensitivities(acquired(0, pattern=holes)[0])
    single = undersample(np.ones((1, 16, 16)), Pattern(np.ones(16, bool)))
    with pytest.raises(AcquisitionError, match="has one channel"):
        estimate_sensitivities(single)
    off = Pattern(np.arange(96) % 2 == 1, calibration=(0,))
    with pytest.raises(AcquisitionError, match="leaves out zero frequency"):
        estimate_sensitivities(acquired(0, pattern=off)[0])
