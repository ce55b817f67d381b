"""What a pattern does to a point and to a wavelet coefficient."""

import numpy as np
import pytest
import pywt

from mrics.errors import PatternError
from mrics.sampling import draw_entry, draw_pattern, radial_profile, spread, transform_spread
from mrics.sampling.masks import pattern_of_mask
from mrics.sampling.regular import alias_positions


@pytest.mark.parametrize(
    ("shape", "share", "rms"),
    [((256, 256), 0.25, 0.0067659), ((256, 256), 0.1, 0.0117188), ((256,), 0.25, 0.108465)],
)
@pytest.mark.parametrize("law", ["uniform", "power"])
def test_side_lobe_rms_is_an_identity(shape, share, rms, law):
    # sqrt((N/M - 1)/(N - 1)) for every mask of M of N (Parseval), figures computed by hand
    pattern = draw_pattern(shape, law=law, acceleration=1 / share, calibration=0)
    found = spread(pattern)
    assert found.rms == pytest.approx(rms, rel=5e-5)
    size, held = np.prod(shape), pattern.mask.sum()
    assert found.rms == pytest.approx(np.sqrt((size / held - 1) / (size - 1)), rel=1e-12)


def test_largest_side_lobe_of_uniform_random_sampling():
    # about RMS x sqrt(ln(N/2)) = 0.0218; simulated elsewhere 0.0226 +- 0.0009 (N = 256^2, p = 1/4)
    lobes = [
        spread(
            draw_pattern((256, 256), law="uniform", acceleration=4, calibration=0, seed=s)
        ).off_peak
        for s in range(12)
    ]
    assert np.mean(lobes) == pytest.approx(0.0226, abs=0.0009)


@pytest.mark.parametrize("settings", [{"law": "uniform"}, {"law": "power", "exponent": 2}])
def test_point_spread_of_independent_draws(settings):
    # mean = transform of p / sum p, variance = sum p(1 - p) / (sum p)^2 at every place off the
    # peak (closed form for independent draws; the idea in Lustig, Donoho, Pauly 2007)
    patterns = [
        draw_pattern((64, 48), draw="bernoulli", acceleration=4, calibration=4, seed=s, **settings)
        for s in range(200)
    ]
    p = patterns[0].probability
    psf = np.array([spread(q).psf * q.mask.sum() / p.sum() for q in patterns])
    law = np.fft.fftshift(np.fft.ifft2(np.fft.ifftshift(p))) * p.size / p.sum()
    sigma = np.sqrt((p * (1 - p)).sum()) / p.sum()
    error = np.abs(psf.mean(axis=0) - law)
    assert error.max() < 6 * sigma / np.sqrt(200)
    rest = np.delete((np.abs(psf - law) ** 2).mean(axis=0).ravel(), 32 * 48 + 24)
    assert rest.mean() == pytest.approx(sigma**2, rel=0.03)
    np.testing.assert_allclose(spread(patterns[0]).law_psf, law, atol=1e-12)


def test_incoherent_peak_is_what_the_draw_adds():
    pattern = draw_pattern((64, 48), acceleration=5, calibration=8, seed=4)
    found = spread(pattern)
    assert found.incoherent_peak == pytest.approx(np.abs(found.psf - found.law_psf).max())
    assert found.incoherent_peak < 0.5 * found.off_peak
    assert spread(draw_entry({"pattern": "full"}, (64, 48))).incoherent_peak is None


@pytest.mark.parametrize(
    ("steps", "shift", "places"),
    [
        ((2, 2), 0, {(0, 0), (4, 0), (0, 4), (4, 4)}),
        ((2, 2), 1, {(0, 0), (2, 4), (4, 0), (6, 4)}),
        ((1, 4), 1, {(0, 0), (2, 6), (4, 4), (6, 2)}),
    ],
)
def test_lattice_aliases(steps, shift, places):
    # N = 8, indices from the point (reciprocal lattice; shifts after Breuer et al. 2006)
    entry = {"pattern": "shifted lattice", "steps": list(steps), "shift": shift}
    found = spread(draw_entry(entry, (8, 8)))
    at = {tuple(int(i) for i in (a - 4) % 8) for a in np.argwhere(np.abs(found.psf) > 0.5)}
    assert at == places
    assert {tuple(int(x) % 8 for x in row) for row in found.aliases} == places
    np.testing.assert_allclose(np.abs(found.psf)[np.abs(found.psf) > 0.5], 1)
    away = [np.hypot(min(u, 8 - u), min(v, 8 - v)) for u, v in places - {(0, 0)}]
    assert found.alias_distance == pytest.approx(min(away))


def test_shifting_moves_aliases_apart():
    plain = alias_positions((128, 96), (1, 4), 0)
    shifted = alias_positions((128, 96), (1, 4), 1)
    assert len(plain) == len(shifted) == 4

    def distance(aliases):
        return np.hypot(*aliases[1:].T).min()

    assert distance(plain) == 24
    assert distance(shifted) == 40


def test_equispaced_lines_alias_at_the_field_of_view_over_the_step():
    found = spread(draw_entry({"pattern": "equispaced", "acceleration": 4}, (256,)))
    assert sorted(found.aliases[:, 0]) == [-128, -64, 0, 64]
    assert found.alias_distance == 64
    assert found.side_lobe == pytest.approx(1)
    assert abs(found.side_lobe_at[0]) % 64 == 0
    assert found.largest_gap == 3


def test_side_lobe_is_not_the_shoulder_of_the_main_lobe():
    # central sixteenth of a line: first side lobe of a sinc, 0.217234 at 1.4303 widths of 16 voxels
    mask = np.zeros(1024, dtype=bool)
    mask[480:544] = True
    found = spread(pattern_of_mask(mask))
    assert found.off_peak > 0.98
    assert found.side_lobe == pytest.approx(0.217234, abs=1e-3)
    assert abs(found.side_lobe_at[0]) == round(1.4303 * 16)
    assert found.largest_gap == 0


def test_largest_gap_in_two_dimensions():
    mask = np.zeros((64, 64), dtype=bool)
    mask[::8] = True
    assert spread(pattern_of_mask(mask)).largest_gap == 14  # 7 rows left out below the last line
    half = draw_entry({"pattern": "full", "partial_fourier": 0.75}, (64, 64))
    assert spread(half).largest_gap == 0  # what the shutter leaves out is no gap


def test_histogram_holds_every_other_voxel():
    counts, edges = spread(draw_pattern((64, 48))).histogram
    assert counts.sum() == 64 * 48 - 1
    assert len(edges) == len(counts) + 1


def dense(size, wavelet, levels):
    """Analysis matrix of pywt's periodized transform."""
    rows = [
        pywt.coeffs_to_array(pywt.wavedec(e, wavelet, "periodization", levels))[0]
        for e in np.eye(size)
    ]
    return np.array(rows).T


@pytest.mark.parametrize("size", [64, 75])
def test_transform_spread_is_the_matrix_of_the_chain(size):
    mask = draw_pattern((size,), acceleration=3, calibration=6, seed=2).mask
    found = transform_spread(mask, "db2", 2)
    padded = -(-size // 4) * 4
    analysis = dense(padded, "db2", 2)[:, :size]
    fourier = np.fft.fft(np.eye(size), norm="ortho")
    keep = np.diag(np.fft.ifftshift(mask).astype(float))
    chain = np.abs(analysis @ fourier.conj().T @ keep @ fourier @ analysis.T)
    ends = np.cumsum([0, padded // 4, padded // 4, padded // 2])
    bands = [slice(ends[2], ends[3]), slice(ends[1], ends[2]), slice(ends[0], ends[1])]
    for s, source in enumerate(bands):
        middle = source.start + (source.stop - source.start) // 2
        column = chain[:, middle].copy()
        assert found.kept[s] == pytest.approx(column[middle], rel=1e-9)
        column[middle] = 0
        for t, target in enumerate(bands):
            assert found.peak[s, t] == pytest.approx(
                column[target].max() / chain[middle, middle], rel=1e-9, abs=1e-12
            )


def test_full_sampling_leaves_no_interference():
    found = transform_spread(np.ones((64, 32), dtype=bool))
    np.testing.assert_allclose(found.kept, 1)
    assert found.peak.max() < 1e-12
    assert found.labels == ("detail 1", "approximation")


def test_too_small_a_grid_for_the_wavelet():
    with pytest.raises(PatternError, match="grid of 12 x 40 is too small for 1 levels"):
        transform_spread(np.ones((12, 40), dtype=bool))
    with pytest.raises(PatternError, match=r"too small for 6 levels(.|\n)*at most 3 levels"):
        transform_spread(np.ones((64, 64), dtype=bool), levels=6)


def test_low_frequencies_keep_coarse_scales():
    found = transform_spread(draw_pattern((256, 256), acceleration=8, seed=1).mask)
    assert (np.diff(found.kept) > 0).all()
    assert found.worst == found.peak[:-1, :-1].max()


def test_coherence_of_fourier_with_spikes_and_with_haar():
    # sqrt(N) max |<phi, psi>|: 1 for spikes, sqrt(N) for Haar, which holds the constant
    # (Candes & Romberg 2007, definition from memory)
    size = 64
    fourier = np.fft.fft(np.eye(size), norm="ortho")
    haar = dense(size, "haar", 6)
    assert np.sqrt(size) * np.abs(fourier).max() == pytest.approx(1)
    assert np.sqrt(size) * np.abs(fourier @ haar.T).max() == pytest.approx(np.sqrt(size))


@pytest.mark.parametrize(("shape", "frames"), [((128,), 0), ((64, 48), 0), ((64, 48), 3)])
def test_radial_profile_counts_positions_by_radius(shape, frames):
    pattern = draw_pattern(shape, acceleration=3, calibration=8, frames=frames, seed=1)
    profile = radial_profile(pattern, rings=8)
    p = pattern.probability[0] if frames else pattern.probability
    free = np.prod(pattern.calibration)
    assert profile.expected.sum() == pytest.approx(p.sum() - free)
    sizes = profile.expected / profile.law
    assert sizes.sum() == pytest.approx(p.size - free)
    held = pattern.mask.sum() / max(frames, 1) - free
    assert (profile.found * sizes).sum() == pytest.approx(held)
    inner = np.abs(np.arange(shape[0]) - shape[0] // 2) / (shape[0] / 2)
    if len(shape) == 1:
        ring = (inner > 0.25) & (inner <= 0.375)
        assert profile.law[2] == pytest.approx(p[ring].mean())
        assert profile.found[2] == pytest.approx(pattern.mask[ring].mean())


def test_regular_patterns_have_no_profile():
    with pytest.raises(PatternError, match="has no law to compare with"):
        radial_profile(draw_entry({"pattern": "full"}, (64,)))
