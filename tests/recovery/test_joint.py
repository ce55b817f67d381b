"""Frames together: joint shrinkage against CVXPY and closed forms, levels of their own weight."""

import warnings
from dataclasses import replace

import cvxpy
import numpy as np
import pytest
import pywt

from mrics.encoding import undersample
from mrics.errors import RecoveryError
from mrics.recovery import check_settings, recover
from mrics.sampling import draw_pattern

SHIFTS = ["none", "full", "random"]


@pytest.fixture
def framed(planes):
    """3 frames of 2 places, contrasts of the same objects, patterns of their own, one channel."""
    pattern = draw_pattern((40,), acceleration=2.5, calibration=8, seed=3, frames=3)
    stack = np.concatenate([planes[:2], 0.6 * planes[:2], 1.5 * planes[:2]])
    return stack, undersample(stack, pattern, sigma=0.02, seed=1)


def haar_analysis(shape, levels):
    """Analysis matrix of PyWavelets' periodized Haar transform, and which rows are details."""
    rows = []
    for index in range(shape[0] * shape[1]):
        unit = np.zeros(shape)
        unit.flat[index] = 1
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", UserWarning)
            found = pywt.wavedec2(unit, "haar", mode="periodization", level=levels)
        packed, slices = pywt.coeffs_to_array(found)
        rows.append(packed.ravel())
    details = np.ones(shape)
    details[slices[0]] = 0
    return np.array(rows).T, details.ravel() > 0


@pytest.mark.parametrize("channels", [1, 2])
def test_joint_optimum_equals_an_independent_solver(channels):
    """CVXPY (Clarabel): two frames with patterns of their own, groups over frames."""
    shape, sigma, weight = (8, 8), 0.05, 1.5
    y, x = np.mgrid[-1:1:8j, -1:1:8j]
    image = (x**2 + y**2 < 0.6) * np.exp(1j * x)
    pattern = draw_pattern(shape, acceleration=2, calibration=4, seed=1, frames=2)
    maps = np.array([np.exp(-((x - a) ** 2) + 1j * a * y) for a in (-1, 1)])[:channels]
    acquisition = undersample(
        np.array([image, 0.5j * image]), pattern, sigma=sigma, seed=5,
        sensitivities=maps[None] if channels > 1 else None,
    )  # fmt: skip
    if channels == 1:
        maps = np.ones((1, 8, 8))
    basis = np.eye(64).reshape(64, 1, 8, 8) * maps
    kspace = np.fft.fftshift(
        np.fft.fft2(np.fft.ifftshift(basis, axes=(2, 3)), norm="ortho"), axes=(2, 3)
    )
    analysis, details = haar_analysis(shape, 2)
    frames = [cvxpy.Variable(64, complex=True) for _ in range(2)]
    misfit, parts = 0, []
    for frame, unknown in enumerate(frames):
        mask = pattern.mask[frame]
        matrix = kspace[:, :, mask].reshape(64, -1).T
        misfit += cvxpy.sum_squares(matrix @ unknown - acquisition.kspace[frame][:, mask].ravel())
        coefficients = analysis[details] @ unknown
        parts += [cvxpy.real(coefficients), cvxpy.imag(coefficients)]
    penalty = cvxpy.sum(cvxpy.norm(cvxpy.vstack(parts), 2, axis=0))
    value = cvxpy.Problem(cvxpy.Minimize(0.5 * misfit + weight * sigma * penalty)).solve(
        solver=cvxpy.CLARABEL
    )
    certificate = recover(
        acquisition, weight=weight, wavelet="haar", levels=2, shift="none", joint=True,
        tolerance=1e-8, iterations=20_000,
    ).certificate  # fmt: skip
    assert certificate.reached
    assert certificate.objective == pytest.approx(value, rel=1e-6)


def test_joint_shrinkage_with_full_sampling_is_one_group_threshold(planes):
    """A unitary: coefficients of all frames lose the threshold off their joint modulus."""
    pattern = draw_pattern((40, 48), acceleration=1, calibration=8, frames=2)
    acquisition = undersample(planes, pattern, sigma=0.05, seed=4)
    result = recover(
        acquisition, weight=2.0, wavelet="haar", levels=3, shift="none", joint=True, tolerance=1e-9
    )
    noisy = recover(acquisition, "zero-filled").image
    for place in range(2):
        found = [
            pywt.wavedec2(noisy[f * 2 + place], "haar", mode="periodization", level=3)
            for f in range(2)
        ]
        for level in range(1, 4):
            shrunk = []
            for pair in zip(found[0][level], found[1][level], strict=True):
                modulus = np.sqrt(sum(np.abs(band) ** 2 for band in pair))
                keep = np.maximum(0, 1 - 0.1 / np.maximum(modulus, 1e-12))
                shrunk.append([keep * band for band in pair])
            for f in range(2):
                found[f][level] = tuple(bands[f] for bands in shrunk)
        for f in range(2):
            expected = pywt.waverec2(found[f], "haar", mode="periodization")
            np.testing.assert_allclose(result.image[f * 2 + place], expected, atol=1e-7)


@pytest.mark.parametrize("shift", SHIFTS)
def test_frames_help_each_other(framed, shift):
    """Contrasts of the same objects: each frame's own lines serve the others."""
    truth, acquisition = framed
    settings = {"weight": 0.5, "shift": shift, "tolerance": 3e-3}
    alone = np.linalg.norm(recover(acquisition, **settings).image - truth)
    together = np.linalg.norm(recover(acquisition, joint=True, **settings).image - truth)
    assert together < 0.97 * alone


@pytest.mark.parametrize("shift", SHIFTS)
def test_one_frame_is_the_plain_recovery(lines, shift):
    settings = {"weight": 1.0, "shift": shift, "iterations": 30}
    np.testing.assert_array_equal(
        recover(lines, joint=True, **settings).image, recover(lines, **settings).image
    )


@pytest.mark.parametrize("shift", SHIFTS)
def test_an_empty_frame_disturbs_nothing(framed, shift):
    """The other frames are as if the empty one had not been there."""
    _, acquisition = framed
    kspace = acquisition.kspace.copy()
    kspace[2:4] = 0
    settings = {"weight": 0.5, "shift": shift, "joint": True, "tolerance": 1e-3}
    holed = recover(replace(acquisition, kspace=kspace), **settings).image
    keep = [0, 1, 4, 5]
    without = replace(
        acquisition, kspace=acquisition.kspace[keep],
        pattern_index=acquisition.pattern_index[keep], volume_shape=(2, 40, 48, 2),
    )  # fmt: skip
    assert not holed[2:4].any()
    np.testing.assert_allclose(holed[keep], recover(without, **settings).image, atol=1e-9)


@pytest.mark.parametrize("shift", SHIFTS)
def test_equal_factors_are_a_change_of_weight(lines, shift):
    settings = {"shift": shift, "tolerance": 1e-4, "levels": 3}
    np.testing.assert_allclose(
        recover(lines, weight=0.5, scales=[2, 2, 2], **settings).image,
        recover(lines, weight=1.0, **settings).image,
        atol=2e-3,
    )


def test_levels_are_shrunk_by_their_own_factor(planes):
    """Full sampling: each level loses its own threshold (soft thresholding, Donoho 1995)."""
    pattern = draw_pattern((40, 48), acceleration=1, calibration=8)
    acquisition = undersample(planes[:1], pattern, sigma=0.05, seed=4)
    settings = {"weight": 2.0, "wavelet": "haar", "shift": "none", "tolerance": 1e-9}
    result = recover(acquisition, scales=[2.0, 0.5], **settings)
    noisy = recover(acquisition, "zero-filled").image[0]
    bands = pywt.wavedec2(noisy, "haar", mode="periodization", level=2)
    for level, cut in ((2, 0.2), (1, 0.05)):
        bands[level] = tuple(
            b * np.maximum(0, 1 - cut / np.maximum(np.abs(b), 1e-12)) for b in bands[level]
        )
    np.testing.assert_allclose(
        result.image[0], pywt.waverec2(bands, "haar", mode="periodization"), atol=1e-7
    )


@pytest.mark.parametrize(
    ("settings", "match"),
    [
        ({"scales": [1.0, -1.0]}, r"scales must be a list of 1 to 12 numbers above 0.*-1"),
        ({"scales": 2.0}, r"scales must be a list"),
        ({"scales": [1, 2], "levels": 3}, r"2 factors were given for 3 levels"),
        ({"joint": 1}, r"joint must be true or false, got 1"),
    ],
)
def test_bad_settings_are_named(settings, match):
    with pytest.raises(RecoveryError, match=match):
        check_settings("wavelet", settings)
