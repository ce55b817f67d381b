"""Echo-train weighting: the blur of a decaying train."""

import numpy as np
import pytest

from mrics.encoding import echo_weights, undersample
from mrics.errors import AcquisitionError
from mrics.numerics import centred_ifft
from mrics.sampling.pattern import Pattern


def ordered(count, echo_of_line, mask=None):
    mask = np.ones(count, bool) if mask is None else mask
    echo = np.asarray(echo_of_line)[mask]
    order = np.column_stack([np.zeros(len(echo), int), echo])
    return Pattern(mask, order=order, calibration=(0,))


def width(profile, fine):
    """Full width at half maximum in samples of an unpadded profile, zero-filled ``fine``-fold."""
    half = profile >= profile.max() / 2
    left, right = np.flatnonzero(half)[[0, -1]]
    lo = left - (profile[left] - profile.max() / 2) / (profile[left] - profile[left - 1])
    hi = right + (profile[right] - profile.max() / 2) / (profile[right] - profile[right + 1])
    return (hi - lo) / fine


@pytest.mark.parametrize(
    ("train", "linear", "centre_out"),
    [(0.5, 1.2183, 1.3010), (1.0, 1.2537, 1.4129), (2.0, 1.4053, 1.6996), (3.0, 1.7028, 2.0862)],
)
def test_blur_is_the_published_one(train, linear, centre_out):
    # Source: T6 (Qin 2012 Magn Reson Imaging 30:1134-1142): magnitude FWHM for T/T2 of a linear
    # and of a centre-out order, truncation included; computed there for N = 256.
    count, fine = 256, 32
    line = np.arange(count)
    for echo, expected, steps in (
        (line, linear, count),
        (np.minimum(2 * np.abs(line - count // 2), count - 1), centre_out, count),
    ):
        pattern = ordered(count, echo)
        weights = echo_weights(pattern, train / steps, 1.0)
        assert weights[count // 2] == 1.0
        padded = np.zeros(count * fine)
        padded[count * fine // 2 - count // 2 : count * fine // 2 + count // 2] = weights
        spread = np.abs(centred_ifft(padded.astype(complex), axes=(0,)))
        assert width(spread, fine) == pytest.approx(expected, rel=5e-3)


def test_only_the_signal_is_weighted():
    pattern = ordered(16, np.arange(16))
    image = np.random.default_rng(1).random((2, 16, 12))
    weights = echo_weights(pattern, 2.0, 20.0)
    plain = undersample(image, pattern).kspace
    np.testing.assert_allclose(
        undersample(image, pattern, echo_weights=weights).kspace, plain * weights[:, None]
    )
    noise = undersample(0 * image, pattern, 1.0, 5).kspace
    both = undersample(image, pattern, 1.0, 5, echo_weights=weights).kspace
    np.testing.assert_allclose(both - noise, plain * weights[:, None], atol=1e-12)


def test_two_dimensional_order_and_missing_positions():
    mask = np.ones((6, 4), bool)
    mask[0, 1] = False
    places = np.argwhere(mask)
    order = np.column_stack([places[:, 1], places[:, 0]])
    pattern = Pattern(mask, order=order, calibration=(0, 0))
    weights = echo_weights(pattern, 5.0, 10.0)
    assert weights.shape == (6, 4)
    assert weights[0, 1] == 1.0
    np.testing.assert_allclose(weights[:, 2], np.exp(-(np.arange(6) - 3) * 0.5))


def test_refusals():
    with pytest.raises(AcquisitionError, match="no order of acquisition"):
        echo_weights(Pattern(np.ones(4, bool)), 1.0, 1.0)
    pattern = ordered(4, np.arange(4))
    with pytest.raises(AcquisitionError, match="decay_ms is 0"):
        echo_weights(pattern, 1.0, 0.0)
    with pytest.raises(AcquisitionError, match="echo_spacing_ms is -1"):
        echo_weights(pattern, -1.0, 10.0)
    short = Pattern(np.ones(4, bool), order=pattern.order[:3])
    with pytest.raises(AcquisitionError, match="lists 3 positions, the pattern acquires 4"):
        echo_weights(short, 1.0, 1.0)
    with pytest.raises(AcquisitionError, match=r"Echo weights of shape \(5,\)"):
        undersample(np.ones((1, 4, 4)), pattern, echo_weights=np.ones(5))
