"""Each remaining check: quiet on a clean scan, and what it says of the thing it looks for."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from open_volumes import open_volume
from scan_manipulations import as_scan, axes_of, noisy, sample, zero_fill
from scipy import ndimage

from mrics.numerics import centred_fft, circular_correlation, stream
from mrics.scan import Axes, Finding, inspect_fully, inspect_scan, read_scan
from mrics.scan.fitness.edges import profile_edge, roll_off
from mrics.scan.fitness.smoothing import linear_shift
from mrics.scan.fitness.spectrum import line_spectrum, noise_correlation

GRE = "sub-a_acq-gre3d"
TSE = "sub-c_acq-tse2d"


def _found(data: np.ndarray, name: str = GRE) -> dict[str, Finding]:
    return {f.code: f for f in inspect_scan(as_scan(data), axes_of(name))}


def test_every_finding_says_all_five_things() -> None:
    data = np.abs(zero_fill(sample(TSE), 1.5, (0, 1)))
    for finding in inspect_scan(as_scan(data), axes_of(TSE)):
        for text in (finding.code, finding.what, finding.where, finding.bias, finding.advice):
            assert text
        assert np.isfinite(finding.statistic)


def test_clipped_magnitude() -> None:
    data = np.abs(sample(GRE))
    top = np.quantile(data, 0.999)
    assert "clipped" not in _found(data)
    finding = _found(np.minimum(data, top))["clipped"]
    assert f"{int((data >= top).sum())} voxels" in finding.what


def test_clipped_real_part_of_complex() -> None:
    data = sample(GRE).copy()
    limit = np.quantile(data.real, 0.0005)
    data.real = np.maximum(data.real, limit)
    assert _found(data)["clipped"].where == "real part, bottom of the range"


@pytest.mark.parametrize("channels", [2, 8])
def test_root_sum_of_squares(channels: int) -> None:
    clean = sample(GRE) / np.sqrt(channels)
    parts = [noisy(clean, 4.0, seed) for seed in range(channels)]
    data = np.sqrt(sum(np.abs(part) ** 2 for part in parts))
    assert "root-sum-of-squares" in _found(data)


@pytest.mark.parametrize("magnitude", [False, True])
def test_noise_scaled_by_receive_correction(magnitude: bool) -> None:
    data = noisy(sample(TSE), 3.0, 1)
    grids = np.meshgrid(*(np.linspace(-1, 1, n) for n in data.shape), indexing="ij")
    data = data / (0.5 + 0.5 * grids[0] ** 2 + 0.4 * grids[1] ** 2 + 0.3 * grids[1])
    found = _found(np.abs(data) if magnitude else data, TSE)
    assert "receive-corrected" in found


def test_noise_that_varies_as_after_parallel_imaging() -> None:
    clean = sample(TSE)
    rng = stream(3, "g")
    noise = rng.standard_normal((2, *clean.shape)).astype(np.float32)
    amplified = np.ones(clean.shape, np.float32)
    amplified[:, 40:70] = 2.2  # bands where folded tissue was hard to tell apart
    amplified[:, 95:120] = 2.8
    found = _found(clean + 4 * amplified * (noise[0] + 1j * noise[1]), TSE)
    assert "noise-varies" in found
    assert "receive-corrected" not in found


def test_low_snr() -> None:
    assert "low-snr" in _found(noisy(sample(GRE), 20.0, 1))
    assert "low-snr" not in _found(noisy(sample(GRE), 7.0, 1))


def test_template_like_and_disagreeing_noise() -> None:
    # Volume H is an average of 152 heads, on 8 bits, with its background masked.
    scan = read_scan(open_volume("H"))
    middle = replace(scan, data=scan.data[:, :, 80:100])
    codes = {f.code for f in inspect_scan(middle, Axes("i", "j", "k"))}
    assert {"template-like", "coarse-levels", "exact-zero-background"} <= codes
    data = zero_fill(sample(TSE), 2.0, (0, 1))
    assert _found(data, TSE)["noise-disagrees"].statistic < 0.6


@pytest.mark.parametrize("amplitude", [0.03, 0.06])
def test_ghost_at_half_the_field_of_view(amplitude: float) -> None:
    data = sample(GRE, 56)
    ghosted = data + np.float32(amplitude) * np.roll(data, data.shape[1] // 2, axis=1)
    assert "ghosting" not in _found(data)
    finding = _found(ghosted)["ghosting"]
    assert finding.where == "axis j"
    assert finding.statistic == pytest.approx(amplitude, rel=0.15)


def test_wrap() -> None:
    data = sample(TSE)
    assert "wrap" not in _found(data, TSE)
    cut = data[:, 30:-30]
    folded = cut + np.roll(np.pad(data[:, :30], ((0, 0), (0, 70), (0, 0))), -30, axis=1)
    assert "wrap" in _found(folded, TSE)


def test_overshoot_of_cubic_interpolation_below_zero() -> None:
    data = np.abs(sample(TSE, 8))
    assert "resampled" not in _found(data, TSE)
    turned = ndimage.rotate(data, 7.0, axes=(0, 1), reshape=False, order=3)
    finding = [
        f for f in inspect_scan(as_scan(turned), axes_of(TSE)) if f.where == "values below zero"
    ]
    assert [f.code for f in finding] == ["resampled"]


def test_zero_margins_after_a_shift_by_whole_voxels() -> None:
    data = np.abs(sample(TSE))
    moved = np.roll(data, 14, axis=1)
    moved[:, :14] = 0
    codes = _found(moved, TSE)
    assert "zero-margins" in codes
    assert "exact-zero-background" not in codes


def test_identical_frames() -> None:
    first, second = (np.abs(noisy(sample(GRE), 2.0, seed)) for seed in (1, 2))
    series = np.stack([first, second, second], axis=3)
    scan = replace(as_scan(first), data=series)
    finding = {f.code: f for f in inspect_scan(scan, axes_of(GRE))}["identical-frames"]
    assert finding.where == "frame 2"
    repeats = replace(scan, data=series[..., :2])
    assert "identical-frames" not in {f.code for f in inspect_scan(repeats, axes_of(GRE))}
    # Volume A holds two true repeats.
    assert "identical-frames" not in {f.code for f in inspect_scan(read_scan(open_volume("A")))}


def test_what_cannot_be_told_is_said() -> None:
    told = inspect_fully(as_scan(np.abs(sample(GRE))), axes_of(GRE)).cannot_be_told
    assert any("homodyne" in line for line in told)
    masked = read_scan(open_volume("A"))
    assert any("no air" in line for line in inspect_fully(masked).cannot_be_told)
    short = as_scan(np.abs(noisy(sample(GRE)[:44, :44], 2.0, 0)))
    told = inspect_fully(short, axes_of(GRE)).cannot_be_told
    assert any("shorter than 48 voxels" in line for line in told)
    thin = as_scan(np.abs(sample(GRE, 4)))
    assert any("along k" in line for line in inspect_fully(thin, axes_of(GRE)).cannot_be_told)


@pytest.mark.parametrize(
    ("identity", "expected", "absent"),
    [
        # What the k-space of each volume was seen to hold when the table of volumes was made.
        ("A", {"exact-zero-background", "resampled"}, {"clipped", "zero-filled"}),
        ("B", {"filtered", "clipped"}, {"exact-zero-background", "zero-filled"}),
        ("C", {"root-sum-of-squares"}, {"exact-zero-background", "filtered", "zero-filled"}),
        ("E", {"resampled", "zero-margins"}, {"exact-zero-background", "clipped", "zero-filled"}),
        ("G", {"zero-margins", "resampled"}, {"exact-zero-background", "clipped", "zero-filled"}),
    ],
)
def test_open_volumes(identity: str, expected: set[str], absent: set[str]) -> None:
    codes = {f.code for f in inspect_scan(read_scan(open_volume(identity)), Axes("i", "j"))}
    assert expected | {"magnitude-only"} <= codes
    assert not codes & absent


def test_white_noise_has_a_flat_spectrum_and_no_correlation() -> None:
    rng = stream(9, "white")
    noise = rng.standard_normal((64, 64, 20))
    whole = np.ones(noise.shape, bool)
    for axis in (0, 1):
        spectrum = line_spectrum(noise, whole, axis, 32)
        assert spectrum is not None
        # The lowest two samples lost the linear trend; beyond them power is the variance.
        np.testing.assert_allclose(spectrum.power[3:], 1.0, atol=0.12)
        correlation = noise_correlation(noise, whole, axis)
        assert correlation is not None
        np.testing.assert_allclose(correlation.lags[1:], 0.0, atol=0.02)


@pytest.mark.parametrize("distance", [0.1, 0.3, 0.5])
def test_linear_interpolation_from_its_correlation(distance: float) -> None:
    # Weights 1 - d and d on white noise: rho(1) = d (1 - d) / ((1 - d)^2 + d^2).
    rho = distance * (1 - distance) / ((1 - distance) ** 2 + distance**2)
    assert linear_shift(rho) == pytest.approx(distance, rel=1e-6)


def test_hamming_correlates_neighbours_as_its_square_says() -> None:
    # (0.54 + 0.46 cos)^2 has Fourier coefficients 0.3974, 0.2484 and 0.0529: rho(1) = 0.625.
    from scan_manipulations import hamming, window

    noise = noisy(np.zeros((64, 64, 20), np.complex64), 1.0, 4)
    filtered = window(noise, hamming, (0,))
    correlation = noise_correlation(filtered, np.ones(filtered.shape, bool), 0)
    assert correlation is not None
    np.testing.assert_allclose(correlation.lags[1:3], [0.625, 0.133], atol=0.02)


def test_profile_edge_and_roll_off_of_known_profiles() -> None:
    profile = np.concatenate([np.full(40, 10.0), np.full(24, 0.1)])
    edge = profile_edge(profile)
    assert (edge.place, edge.fall_db) == (39, pytest.approx(20.0))
    radius = np.abs(np.arange(128) - 64) / 64
    assert roll_off(np.ones(128)) == pytest.approx(0.0, abs=1e-9)
    assert roll_off(np.where(radius > 0.95, 0.25, 1.0)) == pytest.approx(6.02, abs=1.0)
    assert roll_off(np.ones(40)) is None


@pytest.mark.parametrize(("factor", "empty"), [(1.25, 0.36), (1.5, 0.556), (2.0, 0.75)])
def test_zero_padding_leaves_this_share_of_kspace_empty(factor: float, empty: float) -> None:
    # 1 - 1/p^2 of a plane: 36 %, 55.6 %, 75 % (arithmetic).
    padded = zero_fill(sample(TSE), factor, (0, 1))
    power = np.abs(centred_fft(padded[:, :, 9])) ** 2
    share = np.mean(power < 1e-6 * np.median(power[power > np.quantile(power, 0.8)]))
    assert share == pytest.approx(empty, abs=0.01)


def test_circular_correlation_against_its_definition() -> None:
    rng = np.random.default_rng(0)
    first, second = rng.standard_normal((2, 5, 6, 7))
    expected = [(first * np.roll(second, shift, axis=1)).sum() for shift in range(6)]
    np.testing.assert_allclose(circular_correlation(first, second, 1), expected, atol=1e-12)


@pytest.mark.parametrize(
    "shape", [(1, 1, 1), (3, 3, 3), (64, 64, 1), (1, 80, 70), (9, 200, 2), (48, 48, 48)]
)
@pytest.mark.parametrize("kind", ["constant", "noise", "complex noise", "one voxel", "ramp"])
def test_odd_scans_are_inspected_without_a_warning(shape: tuple[int, ...], kind: str) -> None:
    rng = stream(1, "odd", shape)
    noise = rng.standard_normal((2, *shape)).astype(np.float32)
    data = {
        "constant": np.ones(shape, np.float32),
        "noise": np.abs(noise[0]),
        "complex noise": noise[0] + 1j * noise[1],
        "one voxel": np.where(np.arange(np.prod(shape)).reshape(shape) == 0, 5.0, 0.0),
        "ramp": np.arange(1, np.prod(shape) + 1, dtype=np.float32).reshape(shape),
    }[kind]
    for axes in (Axes("i", "j"), Axes("k", "i", "j")):
        inspection = inspect_fully(as_scan(data), axes)
        assert all(np.isfinite(f.statistic) for f in inspection.findings)


@pytest.mark.parametrize("width", [1.0, 1.5, 2.0, 3.0])
@pytest.mark.parametrize("sigma", [0.0, 0.01, 0.3, 2.0, 5.0])
def test_smooth_magnitude_images_have_no_end_of_kspace(width: float, sigma: float) -> None:
    # A Gaussian filter falls steeply into the noise floor, along every axis alike.
    shape = (96, 88, 40)
    rng = stream(2, "smooth", width)
    x, y, z = np.meshgrid(*(np.linspace(-1, 1, n) for n in shape), indexing="ij")
    body = 100.0 * (x**2 + y**2 + z**2 / 2 < 0.6)
    texture = 100 + 200 * ndimage.gaussian_filter(rng.standard_normal(shape), width)
    for smooth in (ndimage.gaussian_filter(body, width), texture):
        noise = sigma * rng.standard_normal((2, *shape))
        found = inspect_scan(as_scan(np.hypot(smooth + noise[0], noise[1])), Axes("i", "j", "k"))
        assert not {f.code for f in found} & {"partial-fourier", "zero-filled", "block-compression"}
