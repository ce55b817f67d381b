"""The first warnings: empty outer k-space, masked air, magnitude only."""

from __future__ import annotations

import numpy as np
import pytest
from nifti_files import blob
from open_volumes import open_volume

from mrics.numerics import centred_fft, centred_ifft, stream
from mrics.scan import Axes, Finding, Scan, inspect_scan, read_scan

SHAPE = (64, 60, 40)
ALL = (0, 1, 2)


def _scan(data: np.ndarray) -> Scan:
    kind = np.complex64 if np.iscomplexobj(data) else np.float32
    return Scan(data=data.astype(kind), affine=np.eye(4), voxel_mm=(1, 1, 1))


def _measured(shape: tuple[int, int, int] = SHAPE, sigma: float = 10.0) -> np.ndarray:
    rng = stream(5, "measured", shape)
    noise = rng.standard_normal(shape) + 1j * rng.standard_normal(shape)
    ramp = np.exp(1j * np.linspace(0, 3, shape[0]))[:, None, None]
    return blob(shape) * ramp + sigma * noise


def _pad(data: np.ndarray, shape: tuple[int, int, int]) -> np.ndarray:
    """Zero-fill k-space, zero frequency staying at N//2."""
    out = np.zeros(shape, complex)
    where = tuple(
        slice(n // 2 - m // 2, n // 2 - m // 2 + m) for n, m in zip(shape, data.shape, strict=True)
    )
    out[where] = centred_fft(data, ALL)
    return centred_ifft(out, ALL) * np.sqrt(np.prod(shape) / data.size)


def _codes(found: tuple[Finding, ...]) -> list[str]:
    return [finding.code for finding in found]


def test_zero_filling_interpolates() -> None:
    # DFT: padding N to 2 N leaves every second sample, once scaled, equal to the original.
    data = _measured()
    padded = _pad(data, (128, 120, 80))
    np.testing.assert_allclose(padded[::2, ::2, ::2], data, atol=1e-9)


def test_a_measured_scan_has_no_finding() -> None:
    assert inspect_scan(_scan(_measured()), Axes("i", "j", "k")) == ()


@pytest.mark.parametrize("shape", [(96, 80, 40), (128, 73, 40)])
def test_zero_filled_axes_and_their_true_matrix(shape: tuple[int, int, int]) -> None:
    scan = _scan(_pad(_measured(), shape))
    found = {f.where: f for f in inspect_scan(scan, Axes("i", "j", "k")) if f.code == "zero-filled"}
    assert sorted(found) == ["axis i", "axis j"]
    for axis, true in (("i", 64), ("j", 60)):
        settings = dict(found[f"axis {axis}"].settings)
        assert settings[axis] == true


def test_masked_air() -> None:
    data = np.abs(_measured())
    data[blob(SHAPE) < 100] = 0
    assert "exact-zero-background" in _codes(inspect_scan(_scan(data)))


def test_air_rounded_to_integers_is_not_masked() -> None:
    data = np.rint(np.abs(_measured(sigma=1.0)))
    assert "exact-zero-background" not in _codes(inspect_scan(_scan(data)))


def test_magnitude_only_is_told_from_the_data() -> None:
    assert _codes(inspect_scan(_scan(np.abs(_measured())))) == ["magnitude-only"]
    assert _codes(inspect_scan(_scan(np.abs(_measured()).astype(complex)))) == ["magnitude-only"]


def test_a_real_image_has_hermitian_kspace() -> None:
    # F(-k) = conj F(k), indices mod N (DFT): why a magnitude-only scan is easier than a measured.
    volume = read_scan(open_volume("B")).data
    kspace = centred_fft(volume[1:, 1:, 5])
    np.testing.assert_allclose(kspace, np.conj(kspace[::-1, ::-1]), atol=1e-4 * abs(kspace).max())


@pytest.mark.parametrize(("identity", "masked"), [("A", True), ("B", False)])
def test_open_volumes(identity: str, masked: bool) -> None:
    codes = _codes(inspect_scan(read_scan(open_volume(identity)), Axes("i", "j", "k")))
    assert ("exact-zero-background" in codes) == masked
    assert "magnitude-only" in codes
