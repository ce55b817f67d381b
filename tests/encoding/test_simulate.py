"""Undersampling against closed-form k-space, noise statistics, geometry, refusals."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import j1

from mrics.encoding import blocks, estimate_sigma, undersample
from mrics.encoding import source as source_module
from mrics.errors import AcquisitionError
from mrics.sampling.pattern import Pattern
from mrics.scan.volume import Axes, Scan


def line_pattern(count, every=2, centre=4):
    mask = np.zeros(count, bool)
    mask[count // 2 % every :: every] = True
    mask[count // 2 - centre // 2 : count // 2 + centre // 2] = True
    return Pattern(mask, calibration=(centre,))


def full(*grid):
    return Pattern(np.ones(grid, bool), calibration=grid)


def scan(shape, dtype=np.complex64, seed=1):
    generator = np.random.default_rng(seed)
    data = generator.standard_normal(shape) + 1j * generator.standard_normal(shape)
    if np.dtype(dtype).kind != "c":
        data = np.abs(data)
    return Scan(data.astype(dtype), np.eye(4), (1.0, 1.0, 1.0))


def frequencies(count):
    """Cycles per field of view, centred."""
    return np.arange(count) - count // 2


@pytest.mark.parametrize(("u", "v"), [(64, 48), (63, 49), (64, 49)])
@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_gaussian_has_its_closed_form(u, v, dtype):
    # Source: transform tables, exp(-r^2/2s^2) <-> 2 pi s^2 exp(-2 pi^2 s^2 k^2), shift theorem.
    s, shift = 3.0, (2.0, -5.0)
    y = (np.arange(u) - u // 2)[:, None] - shift[0]
    x = (np.arange(v) - v // 2)[None] - shift[1]
    image = np.exp(-(x**2 + y**2) / (2 * s**2)).astype(dtype)[None]
    got = undersample(image, full(u)).kspace[0, 0]
    ky, kx = frequencies(u)[:, None] / u, frequencies(v)[None] / v
    expected = 2 * np.pi * s**2 * np.exp(-2 * np.pi**2 * s**2 * (kx**2 + ky**2))
    expected = expected * np.exp(-2j * np.pi * (ky * shift[0] + kx * shift[1]))
    expected /= np.sqrt(u * v)
    assert np.abs(got - expected).max() < (1e-5 if dtype == np.float32 else 1e-6)


def test_ellipse_has_its_closed_form():
    # Source: Van de Walle et al. 2000 IEEE TMI, F = a b J1(2 pi K)/K; the raster is supersampled
    # 16-fold and box-averaged, so low frequencies agree up to the pixel's own sinc.
    n, fine, a, b = 64, 16, 13.2, 20.7
    r = (np.arange(n * fine) - (n // 2) * fine + 0.5) / fine - 0.5
    inside = (r[:, None] / a) ** 2 + (r[None] / b) ** 2 <= 1
    image = inside.reshape(n, fine, n, fine).mean(axis=(1, 3))
    got = undersample(image[None], full(n, n)).kspace[0, 0]
    ky, kx = frequencies(n)[:, None] / n, frequencies(n)[None] / n
    radius = np.hypot(a * ky, b * kx)
    radius[n // 2, n // 2] = 1.0
    expected = a * b * j1(2 * np.pi * radius) / radius
    expected[n // 2, n // 2] = np.pi * a * b
    expected = expected * np.sinc(ky) * np.sinc(kx) / n
    low = np.hypot(frequencies(n)[:, None], frequencies(n)[None]) < n // 4
    assert np.abs(got - expected)[low].max() < 2e-3 * np.abs(expected).max()


def test_one_dimensional_pattern_acts_along_u():
    pattern = line_pattern(16)
    acquired = undersample(scan((1, 16, 12, 3)).data[0].transpose(2, 0, 1), pattern)
    assert acquired.mask.shape == (1, 16, 1)
    zero = ~pattern.mask
    assert not acquired.kspace[:, :, zero].any()
    assert np.all(acquired.kspace[:, :, pattern.mask] != 0)


@pytest.mark.parametrize("partition", [False, True])
@pytest.mark.parametrize("frames", [0, 2])
def test_scan_axes_and_frames_become_planes(partition, frames):
    source = scan((6, 8, 10, frames) if frames else (6, 8, 10))
    grid = (8, 10) if partition else (8,)
    masks = np.random.default_rng(2).random((max(1, frames), *grid)) < 0.6
    pattern = Pattern(masks if frames else masks[0], frames=frames, calibration=(0,) * len(grid))
    acquired = undersample(source, pattern, sigma_scan=0.0)
    axes = Axes("i", "j", "k" if partition else None)
    stack = axes.to_planes(source.data)
    assert acquired.shape == stack.shape
    assert acquired.axes == axes
    for plane in range(len(stack)):
        frame = plane // (len(stack) // max(1, frames))
        assert acquired.pattern_index[plane] == (frame if frames else 0)
        whole = undersample(stack[plane : plane + 1], full(8)).kspace[0, 0]
        mask = masks[frame] if partition else masks[frame][:, None]
        np.testing.assert_allclose(acquired.kspace[plane, 0], whole * mask, atol=1e-6)
    back = axes.from_planes(np.zeros(acquired.shape), acquired.volume_shape)
    assert back.shape == source.shape


@pytest.mark.parametrize(
    ("given", "kept"),
    [(np.float32, np.complex64), (np.complex64, np.complex64), (np.float64, np.complex128)],
)
def test_type_is_kept(given, kept):
    image = scan((2, 8, 8), given).data
    acquired = undersample(image, full(8), 0.1, 3)
    assert acquired.kspace.dtype == kept
    _, encoding, data = next(blocks(acquired))
    assert encoding.dtype == data.dtype == kept


def test_noise_has_the_stated_level_and_survives_the_transform():
    # Source: N6, a unitary transform keeps white noise; zero-filled SD is sigma sqrt(M/N).
    # 4 x 128 x 128 samples: the SD of an SD estimate is 1/sqrt(2n) = 0.28 % per part.
    n, sigma = 128, 0.7
    pattern = line_pattern(n, 4, 8)
    acquired = undersample(np.zeros((4, n, n)), pattern, sigma, 5)
    samples = acquired.kspace[:, 0, pattern.mask]
    assert samples.real.std() == pytest.approx(sigma, rel=0.02)
    assert samples.imag.std() == pytest.approx(sigma, rel=0.02)
    _, encoding, data = next(blocks(acquired))
    image = encoding.adjoint(data)
    expected = sigma * np.sqrt(pattern.mask.mean())
    assert image.real.std() == pytest.approx(expected, rel=0.02)
    assert acquired.sigma == pytest.approx(sigma)
    assert undersample(np.zeros((1, n, n)), pattern, 3.0, sigma_scan=4.0).sigma == 5.0


def test_noise_depends_on_neither_blocks_nor_pattern(monkeypatch):
    image = np.zeros((5, 16, 12), np.float32)
    once = undersample(image, full(16), 1.0, 9)
    monkeypatch.setattr(source_module, "_BLOCK_BYTES", 1)
    again = undersample(image, full(16), 1.0, 9)
    np.testing.assert_array_equal(once.kspace, again.kspace)
    pattern = line_pattern(16)
    fewer = undersample(image, pattern, 1.0, 9)
    np.testing.assert_array_equal(fewer.kspace[:, :, pattern.mask], once.kspace[:, :, pattern.mask])
    assert not np.array_equal(undersample(image, full(16), 1.0, 10).kspace, once.kspace)
    assert not np.array_equal(once.kspace[0], once.kspace[1])


def test_channel_noise_has_the_stated_covariance():
    # Source: Psi = E[n n^H]/2; 64 x 64 x 8 samples give entries to about 1/sqrt(n) = 0.6 %.
    psi = np.array([[2.0, 0.5j, 0.0], [-0.5j, 1.0, 0.3], [0.0, 0.3, 3.0]])
    maps = np.ones((1, 3, 64, 64))
    acquired = undersample(
        np.zeros((8, 64, 64)), full(64), 2.0, 4, sensitivities=maps, covariance=psi
    )
    flat = acquired.kspace.transpose(1, 0, 2, 3).reshape(3, -1)
    measured = flat @ flat.conj().T / flat.shape[1] / 2
    np.testing.assert_allclose(measured, psi / 2.0 * 4.0, atol=0.15)
    np.testing.assert_allclose(acquired.covariance, psi / 2.0 * 4.0)
    _, encoding, data = next(blocks(acquired))
    flat = data.transpose(1, 0, 2, 3).reshape(3, -1)
    white = flat @ flat.conj().T / flat.shape[1] / 2
    np.testing.assert_allclose(white, 4.0 * np.eye(3), atol=0.12)
    np.testing.assert_allclose(encoding.forward(np.zeros((8, 64, 64), complex)), 0)


@pytest.mark.parametrize("correlated", [False, True])
def test_blocks_hold_the_operator_that_made_the_data(correlated):
    generator = np.random.default_rng(6)
    maps = generator.standard_normal((6, 3, 9, 8)) + 1j * generator.standard_normal((6, 3, 9, 8))
    psi = np.eye(3) + 0.3 * (np.eye(3, k=1) + np.eye(3, k=-1)) if correlated else None
    image = scan((6, 9, 8), np.complex128).data
    pattern = Pattern(generator.random((9, 8)) < 0.5, calibration=(0, 0))
    acquired = undersample(image, pattern, sensitivities=maps, covariance=psi)
    seen = 0
    for planes, encoding, data in blocks(acquired, max_bytes=2 * 3 * 9 * 8 * 16):
        assert planes.stop - planes.start == 2
        np.testing.assert_allclose(encoding.forward(image[planes]), data, atol=1e-12)
        seen += 2
    assert seen == 6


@settings(max_examples=15, deadline=None)
@given(
    seed=st.integers(0, 1000),
    sigma=st.floats(0.01, 100),
    angle=st.floats(0, 6),
    u=st.integers(32, 65),
)
def test_estimated_noise_scales_with_the_data(seed, sigma, angle, u):
    image = undersample(np.zeros((2, u, 40)), full(u), 1.0, seed)
    level = estimate_sigma(image)
    factor = sigma * np.exp(1j * angle)
    scaled = undersample(np.zeros((2, u, 40)), full(u), 1.0, seed)
    object.__setattr__(scaled, "kspace", scaled.kspace * factor)
    assert estimate_sigma(scaled) == pytest.approx(sigma * level, rel=1e-9)


@pytest.mark.parametrize("every", [1, 4])
def test_estimated_noise_is_close_beside_an_object(every):
    # Common practice, no source: outer k-space of an object of finite resolution is noise.
    y, x = np.mgrid[-64:64, -64:64] / 64
    edge = 64 * (1 - np.hypot(x / 0.7, y / 0.8))
    image = np.repeat(100 / (1 + np.exp(-edge))[None], 4, 0)
    for sigma in (1.0, 3.0):
        acquired = undersample(image, line_pattern(128, every, 16), sigma, 8)
        assert estimate_sigma(acquired) == pytest.approx(sigma, rel=0.08)


def test_refusals_name_the_axis():
    source = scan((6, 8, 10))
    with pytest.raises(AcquisitionError, match=r"7 positions along phase axis j, which has 8"):
        undersample(source, full(7), sigma_scan=0.0)
    with pytest.raises(AcquisitionError, match=r"9 positions along partition axis k, which has 10"):
        undersample(source, full(8, 9), sigma_scan=0.0)
    with pytest.raises(AcquisitionError, match="needs a partition axis"):
        undersample(source, full(8, 10), axes=Axes("i", "j"), sigma_scan=0.0)
    with pytest.raises(AcquisitionError, match=r"positions along axis u, which has 8"):
        undersample(source.data, full(7))
    with pytest.raises(AcquisitionError, match="got 2 axes"):
        undersample(source.data[0], full(8))
    framed = Pattern(np.ones((3, 8), bool), frames=3)
    with pytest.raises(AcquisitionError, match="has 3 frames, the scan has 1"):
        undersample(source, framed, sigma_scan=0.0)
    with pytest.raises(AcquisitionError, match="4 planes do not divide"):
        undersample(np.zeros((4, 8, 8)), framed)
    with pytest.raises(AcquisitionError, match="Noise level -1"):
        undersample(source.data, full(8), -1.0)
    with pytest.raises(AcquisitionError, match="another grid"):
        undersample(source.data, full(8), sensitivities=np.ones((1, 2, 8, 9)))
    multi = scan((6, 8, 10, 1, 2))
    with pytest.raises(AcquisitionError, match="2 channels of its own"):
        undersample(multi, full(8), sensitivities=np.ones((1, 2, 8, 6)), sigma_scan=0.0)
    maps = np.ones((1, 2, 8, 10))
    with pytest.raises(AcquisitionError, match=r"shape \(3, 3\) does not fit 2 channels"):
        undersample(source.data, full(8), sensitivities=maps, covariance=np.eye(3))
    with pytest.raises(AcquisitionError, match="not positive definite"):
        undersample(source.data, full(8), sensitivities=maps, covariance=np.ones((2, 2)))
    with pytest.raises(AcquisitionError, match="not Hermitian"):
        undersample(
            source.data, full(8), sensitivities=maps, covariance=np.array([[1, 0.5], [0, 1]])
        )
    tiny = undersample(np.ones((1, 4, 4)), full(4))
    with pytest.raises(AcquisitionError, match="too few to estimate noise"):
        estimate_sigma(tiny)


class OnDemand:
    """Sensitivities that are only computed for the planes asked for."""

    def __init__(self, maps):
        self._maps, self.shape, self.ndim = maps, maps.shape, maps.ndim
        self.asked = []

    def __len__(self):
        return self.shape[0]

    def __getitem__(self, planes):
        self.asked.append(planes)
        return self._maps[planes]


def test_sensitivities_may_be_computed_on_demand_and_shared_by_frames():
    generator = np.random.default_rng(3)
    maps = generator.standard_normal((3, 2, 8, 6)) + 0j
    source = scan((6, 8, 3, 2), np.complex128)
    lazy = OnDemand(maps)
    acquired = undersample(source, full(8), sensitivities=lazy, sigma_scan=0.0)
    assert acquired.kspace.shape == (6, 2, 8, 6)
    stack = Axes("i", "j").to_planes(source.data)
    seen = 0
    for planes, encoding, data in blocks(acquired, max_bytes=4 * 2 * 8 * 6 * 16):
        whole = np.concatenate([maps, maps])[planes]
        np.testing.assert_array_equal(encoding.sensitivities, whole)
        np.testing.assert_allclose(encoding.forward(stack[planes]), data, atol=1e-12)
        seen += len(data)
    assert seen == 6
    assert all(part.stop - part.start <= 3 for part in lazy.asked)


def test_frames_on_different_grids_are_refused():
    pattern = Pattern(np.ones((2, 16), bool), frames=2, calibration=(0,))
    frames = [np.ones((3, 16, 12)), np.ones((3, 16, 10))]
    with pytest.raises(AcquisitionError, match=r"frame 0 has shape \(3, 16, 12\), frame 1 has"):
        undersample(frames, pattern)
    with pytest.raises(AcquisitionError, match="got list"):
        undersample(frames[:1], pattern)
