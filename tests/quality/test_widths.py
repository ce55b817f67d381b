"""Widths of point responses and edges against closed forms."""

import numpy as np
import pytest
from scipy.special import sici
from scipy.stats import norm

from mrics.quality.widths import edge_widths, half_widths, interpolate_lines


def test_one_sample_has_the_width_of_the_sinc():
    # Full width at half maximum of sinc(x): 1.206709 (root of sinc, computed from the definition).
    line = np.zeros((1, 13))
    line[0, 6] = 2.0
    widths = half_widths(line)
    assert widths.width[0] == pytest.approx(1.206709, abs=1e-4)
    assert widths.peak[0] == 2.0
    assert widths.shift[0] == 0.0


@pytest.mark.parametrize("sigma", [1.0, 1.7, 2.5])
def test_gaussian_half_width(sigma):
    # 2 sqrt(2 ln 2) sigma = 2.354820 sigma, normal distribution.
    x = np.arange(-15, 16)
    widths = half_widths(np.exp(-0.5 * (x / sigma) ** 2)[None])
    assert widths.width[0] == pytest.approx(2.354820 * sigma, rel=2e-3)


def test_shift_of_the_peak():
    x = np.arange(-12, 13)
    widths = half_widths(np.exp(-0.5 * ((x - 0.75) / 1.5) ** 2)[None])
    assert widths.shift[0] == pytest.approx(0.75, abs=1 / 32)


def test_hann_filtered_response_is_two_voxels_wide():
    # Hann window over full k-space: 2.000 voxels (computed from its closed form).
    k = np.arange(64) - 32
    response = np.fft.fftshift(np.fft.ifft(np.fft.ifftshift(0.5 + 0.5 * np.cos(np.pi * k / 32))))
    assert half_widths(response.real[None, 32 - 12 : 32 + 13]).width[0] == pytest.approx(
        2.0, rel=2e-3
    )


def test_level_measures_plateaus():
    line = np.zeros((1, 31))
    line[0, 11:20] = 1.0
    assert half_widths(line, np.array([1.0])).width[0] == pytest.approx(9.0, abs=0.1)


def test_no_width_where_nothing_comes_back_or_falls():
    flat, empty, dark = np.ones(13), np.zeros(13), -np.ones(13)
    widths = half_widths(np.stack([flat, empty, dark]))
    assert np.isinf(widths.width[0])
    assert np.isnan(widths.width[1:]).all()


def test_interpolation_keeps_the_samples():
    lines = np.random.default_rng(0).standard_normal((3, 9))
    np.testing.assert_allclose(interpolate_lines(lines)[:, ::32], lines, atol=1e-12)


def test_sinc_blurred_edge():
    # 10 to 90 % rise of an edge of full square k-space: 0.891639 voxels (root of Si, computed).
    x = np.arange(-16, 16, 1 / 64)
    edge = 0.5 + sici(np.pi * x)[0] / np.pi
    assert edge_widths(edge[None], 1 / 64)[0] == pytest.approx(0.891639, rel=1e-3)
    assert edge_widths(5.0 - 3.0 * edge[None], 1 / 64)[0] == pytest.approx(0.891639, rel=1e-3)


def test_gaussian_edge():
    # 2.563103 sigma, normal distribution.
    x = np.arange(-12, 12, 0.1)
    edges = np.stack([norm.cdf(x / s) for s in (1.0, 2.0)])
    np.testing.assert_allclose(edge_widths(edges, 0.1), [2.563103, 5.126206], rtol=2e-3)


def test_no_edge_no_width():
    rows = np.stack([np.ones(16), np.r_[np.zeros(4), np.zeros(8), np.zeros(4)]])
    assert np.isnan(edge_widths(rows, 1.0)).all()
