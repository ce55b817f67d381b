"""Best of N draws."""

import numpy as np
import pytest

from mrics.errors import PatternError
from mrics.numerics import stream
from mrics.sampling import draw_pattern, transform_spread
from mrics.sampling.draws import exact_count
from mrics.sampling.probability import ONE

SETTINGS = {"acceleration": 5, "calibration": 8, "seed": 7}


def peak(mask, p):
    """max |PSF - transform of p| / sum p by numpy's own transform."""
    return np.abs(np.fft.fft2(mask - p)).max() / p.sum()


def test_the_kept_draw_has_the_lowest_incoherent_peak():
    best = draw_pattern((64, 48), best_of=12, **SETTINGS)
    plain = draw_pattern((64, 48), **SETTINGS)
    p = plain.probability
    quanta = np.rint(p * ONE).astype(np.int64)
    masks = [plain.mask] + [
        exact_count(quanta, stream(7, "pattern", "candidate", n)) for n in range(1, 12)
    ]
    peaks = [peak(mask, p) for mask in masks]
    facts = best.settings
    assert facts["best_index"] == int(np.argmin(peaks))
    assert (best.mask == masks[facts["best_index"]]).all()
    assert facts["best_peak"] == pytest.approx(min(peaks), rel=1e-12)
    assert facts["median_peak"] == pytest.approx(np.median(peaks), rel=1e-12)
    assert facts["best_gain"] == pytest.approx(np.median(peaks) / min(peaks), rel=1e-12)
    assert facts["best_gain"] > 1
    # the law's own shoulder hides the random part, and is the same for every draw
    assert facts["law_shoulder"] > 3 * max(peaks)


def test_more_candidates_are_never_worse():
    peaks = [
        draw_pattern((64, 48), best_of=n, **SETTINGS).settings["best_peak"] for n in (2, 8, 32)
    ]
    assert peaks == sorted(peaks, reverse=True)


def test_ranking_by_wavelet_scales():
    best = draw_pattern((64, 64), best_of=6, best_by="wavelet-scales", **SETTINGS)
    assert best.settings["best_peak"] == pytest.approx(transform_spread(best.mask).worst)
    assert best.settings["best_gain"] >= 1


@pytest.mark.parametrize("draw", ["poisson-disc", "jittered", "bernoulli"])
def test_any_draw_and_frames_can_be_ranked(draw):
    best = draw_pattern((64, 48), draw=draw, best_of=3, frames=2, **SETTINGS)
    assert best.mask.shape == (2, 64, 48)
    p = best.probability[0]
    assert best.settings["best_peak"] == pytest.approx(max(peak(m, p) for m in best.mask))


@pytest.mark.parametrize(
    ("settings", "message"),
    [
        ({"best_of": 0}, "best_of = 0 is not a whole number from 1"),
        ({"best_of": 2.5}, "best_of = 2.5"),
        ({"best_of": 2, "best_by": "rms"}, "best_by 'rms' is not known"),
    ],
)
def test_bad_requests(settings, message):
    with pytest.raises(PatternError, match=message):
        draw_pattern((64, 48), **settings)
