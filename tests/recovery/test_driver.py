"""recover: settings, bad input, noise floor, equivariance, planes that must not disturb others."""

from dataclasses import replace

import numpy as np
import pytest

from mrics.errors import RecoveryError
from mrics.recovery import METHODS, check_settings, recover
from mrics.recovery.settings import SETTINGS

VARIANTS = [
    ("zero-filled", {}),
    ("least-squares", {}),
    ("wavelet", {}),
    ("wavelet", {"shift": "none"}),
    ("wavelet", {"shift": "full", "tolerance": 1e-2, "weight": 0.4}),
    ("variation", {}),
    ("variation", {"order": 2, "tolerance": 1e-2, "weight": 0.5}),
    ("wavelet+variation", {"tolerance": 1e-2, "weight": 0.4}),
]


def test_every_method_has_settings():
    assert set(METHODS) == set(SETTINGS)


@pytest.mark.parametrize(
    ("method", "settings", "match"),
    [
        ("wavlet", {}, r"no recovery called 'wavlet'; did you mean 'wavelet'"),
        ("wavelet", {"wieght": 1}, r"no setting 'wieght'; did you mean 'weight'"),
        ("wavelet", {"weight": -1.0}, r"weight must be a number above 0.*got -1"),
        ("wavelet", {"weight": float("nan")}, r"weight must be a number.*got nan"),
        (
            "wavelet",
            {"weight": "atuo"},
            r"weight must be .*got 'atuo'; did you mean 'auto'",
        ),
        ("wavelet", {"wavelet": "db44"}, r"wavelet must be one of 'haar'.*did you mean 'db4'"),
        ("wavelet", {"iterations": 2.5}, r"iterations must be a whole number.*got 2.5"),
        ("variation", {"order": 3}, r"order must be a whole number.*at most 2, got 3"),
        ("wavelet", {"iterations": True}, r"iterations must be a whole number.*got True"),
        ("least-squares", {"tolerance": 0.0}, r"tolerance must be a number above 0"),
        ("zero-filled", {"weight": 1}, r"no setting 'weight'"),
    ],
)
def test_bad_settings_are_named(method, settings, match):
    with pytest.raises(RecoveryError, match=match):
        check_settings(method, settings)


@pytest.mark.parametrize("bad", [np.nan, np.inf])
def test_non_finite_samples_are_located(lines, bad):
    kspace = lines.kspace.copy()
    kspace[2, 0, 20, 7] = bad
    with pytest.raises(RecoveryError, match=r"1 NaN or infinite .*plane 2.*\(2, 0, 20, 7\)"):
        recover(replace(lines, kspace=kspace))


@pytest.mark.parametrize(("method", "settings"), VARIANTS)
def test_scaling_data_and_sigma_scales_the_image(lines, method, settings):
    """recover(a y, |a| sigma) = a recover(y, sigma), a complex."""
    factor = 3e7 * np.exp(0.7j)
    scaled = replace(lines, kspace=factor * lines.kspace, sigma_added=abs(factor) * 0.02)
    one, two = recover(lines, method, **settings), recover(scaled, method, **settings)
    np.testing.assert_allclose(
        two.image, factor * one.image, rtol=0, atol=1e-9 * abs(factor) * abs(one.image).max()
    )


@pytest.mark.parametrize(("method", "settings"), VARIANTS)
def test_an_empty_plane_is_zero_and_disturbs_nothing(points, method, settings):
    if hasattr(SETTINGS[method], "weight"):
        settings = {**settings, "weight": 0.4}
    kspace = points.kspace.copy()
    kspace[1] = 0
    full, holed = (
        recover(points, method, **settings),
        recover(replace(points, kspace=kspace), method, **settings),
    )
    assert not holed.image[1].any()
    keep = [0, 2, 3]
    np.testing.assert_array_equal(holed.image[keep], full.image[keep])


@pytest.mark.parametrize(("method", "settings"), VARIANTS)
def test_all_zero_acquisition_gives_zeros_and_says_so(points, method, settings):
    result = recover(replace(points, kspace=0 * points.kspace), method, **settings)
    assert not result.image.any()
    assert "all acquired samples are zero" in result.certificate.note


@pytest.mark.parametrize(("method", "settings"), VARIANTS)
def test_types_are_kept(lines, points, method, settings):
    assert recover(lines, method, **settings).image.dtype == np.complex128
    assert recover(points, method, **settings).image.dtype == np.complex64


def test_a_tolerance_below_precision_is_named(lines, points):
    settings = {"weight": 0.5, "tolerance": 1e-9, "iterations": 5}
    note = recover(points, "variation", **settings).certificate.note
    assert "tolerance 1e-09 lies below the precision of complex64, 5e-07" in note
    assert "precision" not in recover(lines, "variation", **settings).certificate.note


def test_unknown_noise_uses_the_stated_floor(lines):
    result = recover(replace(lines, sigma_added=0.0), "wavelet")
    region = lines.kspace[:, :, 16:24]
    rms = np.sqrt(np.mean(np.abs(region) ** 2))
    assert result.certificate.sigma == pytest.approx(1e-4 * rms, rel=1e-9)
    assert "noise level unknown" in result.certificate.note
