"""What the honest multi-channel object is for: recoveries look worse on it, as they should."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from mrics.encoding import acquisition_from_kspace, simulate_coils
from mrics.numerics import centred_fft, centred_ifft
from mrics.phantom import channel_kspace, fit_waves, shepp_logan
from mrics.phantom.ellipses import positions
from mrics.recovery import recover
from mrics.sampling import Pattern


@pytest.fixture(scope="module")
def scanned() -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Fields of eight loops, closed-form k-space of the head in them, the combined image."""
    coils = simulate_coils((1, 64, 64), (3.0, 3.0, 3.0), number=8, standoff_mm=25.0)
    r = positions((64, 64), (3.0, 3.0))
    values = coils.field_at(np.concatenate([np.zeros((64, 64, 1)), r], axis=-1))
    maps, error = fit_waves(values.reshape(8, -1), r.reshape(-1, 2), (192.0, 192.0), order=8)
    assert error < 1e-3
    kspace = channel_kspace(shepp_logan(scale=90.0), maps, (64, 64))
    fields = maps.value(r)
    combined = (fields.conj() * centred_ifft(kspace)).sum(axis=0)
    return fields, kspace, combined / (np.abs(fields) ** 2).sum(axis=0)


def error_at(step: int, kspace: np.ndarray, fields: np.ndarray, truth: np.ndarray) -> float:
    mask = np.zeros(64, bool)
    mask[32 % step :: step] = True
    pattern = Pattern(mask)
    data = kspace[None] * mask[None, None, :, None]
    acquisition = replace(
        acquisition_from_kspace(data, pattern, channel_axis=1), sensitivities=fields[None]
    )
    image = recover(acquisition, "least-squares", damping=0.0).image[0]
    return float(np.linalg.norm(image - truth) / np.linalg.norm(truth))


def test_every_second_line_of_an_object_never_rasterised_leaves_an_error(
    scanned: tuple[np.ndarray, np.ndarray, np.ndarray],
) -> None:
    """Noise-free, exact maps, R = 2 with eight channels: the raster's own data are unfolded to
    rounding, the object's leave percents (Guerquin-Kern et al. 2012: "overly optimistic results
    obtained with rasterized simulations").
    """
    fields, kspace, combined = scanned
    raster = centred_fft(fields * combined)
    assert error_at(2, raster, fields, combined) < 1e-4
    assert 0.01 < error_at(2, kspace, fields, combined) < 0.1


def test_all_lines_give_the_combined_image_back(
    scanned: tuple[np.ndarray, np.ndarray, np.ndarray],
) -> None:
    fields, kspace, combined = scanned
    assert error_at(1, kspace, fields, combined) < 1e-4
