"""Measured k-space: files, channel axes, readout transform, noise samples, refusals."""

from dataclasses import replace

import nibabel
import numpy as np
import pytest
from receive import regular, scene

from mrics.encoding import acquisition_from_kspace, blocks, undersample
from mrics.errors import AcquisitionError, MricsWarning, ScanError
from mrics.numerics import centred_fft
from mrics.recovery import recover
from mrics.sampling.pattern import Pattern
from mrics.scan.volume import Axes


def kspace(planes=3, u=32, v=40, channels=4, noise=0.02, steps=(2,), calibration=8, seed=1):
    """Centred (plane, channel, u, v) samples of a 2-D multi-slice scan and its pattern."""
    maps, _, images = scene(u, v, channels, planes)
    pattern = regular((u,) if len(steps) == 1 else (u, v), steps, calibration)
    data = undersample(images, pattern, noise, seed, sensitivities=maps[None])
    return data.kspace, pattern


@pytest.mark.parametrize("channel_axis", [0, 1, 2, 3, -1])
def test_channel_axis_may_stand_anywhere(channel_axis):
    data, pattern = kspace(planes=8, u=64, v=96)
    given = np.moveaxis(data, 1, channel_axis)
    made = acquisition_from_kspace(given, pattern, channel_axis=channel_axis)
    np.testing.assert_array_equal(made.kspace, data)
    assert made.sigma == pytest.approx(0.02, rel=0.1)
    assert made.calibration == (8,)


def test_one_plane_with_and_without_channels():
    data, pattern = kspace()
    made = acquisition_from_kspace(data[0, 0], pattern)
    np.testing.assert_array_equal(made.kspace[0, 0], data[0, 0])
    made = acquisition_from_kspace(data[0].transpose(1, 2, 0), pattern, channel_axis=2)
    np.testing.assert_array_equal(made.kspace, data[:1])


def test_numpy_file_stays_memory_mapped(tmp_path):
    data, pattern = kspace()
    np.save(tmp_path / "k.npy", data.astype(np.complex64))
    made = acquisition_from_kspace(tmp_path / "k.npy", pattern, channel_axis=1)
    base = made.kspace
    while base is not None and not isinstance(base, np.memmap):
        base = base.base
    assert isinstance(base, np.memmap)
    assert made.kspace.dtype == np.complex64
    assert recover(made, "least-squares").image.shape == (3, 32, 40)


def test_nifti_file_with_axes(tmp_path):
    data, pattern = kspace()
    volume = data.transpose(3, 2, 0, 1).astype(np.complex64)  # readout i, phase j, slice k, channel
    nibabel.save(nibabel.Nifti1Image(volume, np.eye(4)), tmp_path / "k.nii.gz")
    made = acquisition_from_kspace(tmp_path / "k.nii.gz", pattern, channel_axis=3)
    np.testing.assert_array_equal(made.kspace, data.astype(np.complex64))
    assert made.axes == Axes("i", "j", None)
    nibabel.save(nibabel.Nifti1Image(volume[..., 0], np.eye(4)), tmp_path / "one.nii.gz")
    with pytest.raises(ScanError, match="Channel axis 3 has length 1"):
        acquisition_from_kspace(tmp_path / "one.nii.gz", pattern, channel_axis=3)


@pytest.mark.parametrize("to_file", [False, True])
def test_readout_of_a_3d_acquisition_is_transformed(tmp_path, to_file):
    data, pattern = kspace(planes=6, steps=(2, 1))
    raw = centred_fft(data, axes=(0,))
    scratch = tmp_path / "scratch.npy" if to_file else None
    made = acquisition_from_kspace(raw, pattern, channel_axis=1, scratch=scratch)
    np.testing.assert_allclose(made.kspace, data, atol=1e-12)
    assert isinstance(made.kspace, np.memmap) == to_file
    same = acquisition_from_kspace(data, pattern, channel_axis=1, readout_transformed=True)
    np.testing.assert_array_equal(same.kspace, data)


def test_noise_samples_whiten_the_channels(tmp_path):
    psi = np.array([[2, 0.5j], [-0.5j, 1]]) * 1e-4
    generator = np.random.default_rng(4)
    samples = generator.standard_normal((2, 2, 20000))
    samples = np.linalg.cholesky(psi) @ (samples[0] + 1j * samples[1])
    np.save(tmp_path / "noise.npy", samples)
    data, pattern = kspace(channels=2, noise=0.0)
    made = acquisition_from_kspace(data, pattern, tmp_path / "noise.npy", channel_axis=1)
    np.testing.assert_allclose(made.covariance, psi, atol=5e-6)
    assert made.sigma == pytest.approx(np.sqrt(1.5e-4), rel=0.02)
    _, encoding, whitened = next(blocks(made))
    factor = np.linalg.cholesky(made.covariance / made.sigma**2)
    back = np.einsum("cd,pduv->pcuv", factor, whitened)
    np.testing.assert_allclose(np.abs(back), np.abs(np.roll(data, (-16, -20), (2, 3))), atol=1e-12)
    assert encoding.channels == 2


@pytest.mark.parametrize("steps", [(2,), (2, 1)])
def test_without_noise_samples_the_border_tells_the_covariance(steps):
    maps, _, images = scene(48, 40, 3, 60)
    wide = np.zeros((60, 48, 80), complex)
    wide[8:52, :, 20:60] = images[8:52]
    wide_maps = np.pad(maps, ((0, 0), (0, 0), (20, 20)), mode="edge")[None]
    psi = np.array([[1, 0.4, 0], [0.4, 1, 0.4j], [0, -0.4j, 1]])
    pattern = regular((48,) if len(steps) == 1 else (48, 80), steps, 16)
    data = undersample(wide, pattern, 0.05, 3, sensitivities=wide_maps, covariance=psi)
    made = acquisition_from_kspace(
        data.kspace, pattern, channel_axis=1, readout_transformed=len(steps) == 2
    )
    np.testing.assert_allclose(made.covariance, 0.05**2 * psi, atol=0.05**2 * 0.08)
    assert made.sigma == pytest.approx(0.05, rel=0.03)
    assert any("from the border of the image along the readout" in n for n in made.notes)


def test_the_image_is_that_of_the_simulated_acquisition():
    maps, _, images = scene(32, 40, 4, 2)
    pattern = regular((32,), (2,), 12)
    simulated = undersample(images, pattern, sensitivities=maps[None])
    measured = acquisition_from_kspace(simulated.kspace, pattern, channel_axis=1)
    simulated = replace(simulated, sensitivities=None, sigma_scan=measured.sigma)
    np.testing.assert_allclose(
        recover(measured, "unfold").image, recover(simulated, "unfold").image, atol=1e-9
    )


def test_refusals(tmp_path):
    data, pattern = kspace()
    with pytest.raises(AcquisitionError, match="got 4 axes"):
        acquisition_from_kspace(data, pattern)
    with pytest.raises(AcquisitionError, match="Channel axis 1 has length 1"):
        acquisition_from_kspace(data[:, :1], pattern, channel_axis=1)
    with pytest.raises(AcquisitionError, match="no channel axis 5"):
        acquisition_from_kspace(data, pattern, channel_axis=5)
    with pytest.raises(AcquisitionError, match="must be complex, got float64"):
        acquisition_from_kspace(data.real.copy(), pattern, channel_axis=1)
    moved = np.roll(data, 1, axis=2)
    with pytest.raises(AcquisitionError, match=r"samples that the pattern leaves out, the first"):
        acquisition_from_kspace(moved, pattern, channel_axis=1)
    holes = data.copy()
    holes[:, :, [4, 6]] = 0
    with pytest.raises(AcquisitionError, match=r"2 of 20 acquired positions hold only zeros, .* 4"):
        acquisition_from_kspace(holes, pattern, channel_axis=1)
    with pytest.raises(AcquisitionError, match="32 positions along axis u, which has 16"):
        acquisition_from_kspace(data[:, :, :16], pattern, channel_axis=1)
    with pytest.raises(AcquisitionError, match=r"shape \(3, 50\) do not fit 4 channels"):
        acquisition_from_kspace(data, pattern, np.ones((3, 50), complex), channel_axis=1)
    with pytest.raises(AcquisitionError, match="There is no file"):
        acquisition_from_kspace(tmp_path / "none.npy", pattern)
    (tmp_path / "bad.npy").write_bytes(b"not an array")
    with pytest.raises(AcquisitionError, match="cannot be read as a NumPy array"):
        acquisition_from_kspace(tmp_path / "bad.npy", pattern)
    silent = data.copy()
    silent[:, 2] = 0
    with pytest.warns(MricsWarning, match="left out: 2"):
        assert acquisition_from_kspace(silent, pattern, channel_axis=1).channels == 3
    framed = Pattern(np.ones((2, 32), bool), frames=2)
    with pytest.raises(AcquisitionError, match="3 planes do not divide"):
        acquisition_from_kspace(data, framed, channel_axis=1)
