"""T2 decay along the train: point-spread widths against closed forms."""

from __future__ import annotations

import numpy as np
import pytest

from mrics.errors import PatternError
from mrics.sampling import Pattern, draw_entry
from mrics.sampling.decay import decay_spread
from mrics.sampling.order import order_pattern


def train(scheme: str, length: int = 256, **keys):
    """One echo per line, the train lasting ``length`` ms from the excitation on."""
    pattern = Pattern(np.ones(length, dtype=bool), calibration=(0,))
    return order_pattern(
        pattern, train_length=length, scheme=scheme, spacing_ms=1.0, first_ms=0.5, **keys
    )


# Widths of the magnitude point spread of an exponential cut off at k_max, in voxels, for a train
# of T/T2 from -k_max to k_max (linear) or from 0 to k_max (centre-out), and its peak
# (T2/T)(1 - exp(-T/T2)): transforms of exponentials, computed for 256 lines; the setting is that
# of Qin 2012, Magn Reson Imaging 30:1134-1142.
@pytest.mark.parametrize(
    ("ratio", "linear", "outward", "signal"),
    [
        (0.5, 1.2183, 1.3010, 0.7869),
        (1.0, 1.2537, 1.4129, 0.6321),
        (2.0, 1.4053, 1.6996, 0.4323),
        (3.0, 1.7028, 2.0862, 0.3167),
    ],
)
def test_widths_of_linear_and_centre_out_trains(ratio, linear, outward, signal):
    for scheme, width in (("linear", linear), ("centre-out", outward)):
        played = train(scheme)
        found = decay_spread(played.pattern, played.times_ms, 256 / ratio)
        assert found.width[0] == pytest.approx(width, abs=1e-3)
        # Without decay: the sinc of full k-space, 1.206709 voxels (root of sinc = 1/2).
        assert found.width_without[0] == pytest.approx(1.206709, abs=1e-4)
        # Its first side lobe, 0.217234 of the peak (extremum of the sinc).
        assert found.side_lobe_without[0] == pytest.approx(0.217234, abs=5e-4)
        assert found.broadening[0] == pytest.approx(width / 1.206709, abs=1e-3)
        assert found.signal == pytest.approx(signal, abs=1e-3)


def test_snr_per_unit_time_of_a_decaying_train():
    # Signal / sqrt(T) = (1 - exp(-x)) / sqrt(x), largest at x = T/T2 = 1.2564 (root, computed);
    # the paper (Qin 2012, abstract) gives 1.2.
    lengths = np.arange(100, 160)
    t2 = 100.0
    value = [
        decay_spread(p.pattern, p.times_ms, t2).signal * np.sqrt(n)
        for n in lengths
        for p in [train("linear", int(n))]
    ]
    assert lengths[int(np.argmax(value))] / t2 == pytest.approx(1.2564, abs=0.01)


def test_long_t2_changes_nothing():
    played = train("linear")
    found = decay_spread(played.pattern, played.times_ms, 1e9)
    assert found.broadening[0] == pytest.approx(1.0, abs=1e-6)
    assert found.signal == pytest.approx(1.0, abs=1e-6)


def test_undersampling_alone_does_not_broaden():
    pattern = draw_entry({"law": "power", "calibration": 12, "elliptical": True}, (64, 48), 4, 0)
    played = order_pattern(pattern, train_length=16, scheme="radial-sector", spacing_ms=4.0)
    assert decay_spread(played.pattern, played.times_ms, 1e9).broadening == pytest.approx((1, 1))
    found = decay_spread(played.pattern, played.times_ms, 60.0)
    # Elliptical k-space, 2 J1(x)/x: its magnitude is 1.410170 voxels wide (root of jinc = 1/2).
    assert found.width_without == pytest.approx((1.410170, 1.410170), rel=0.02)
    # Its side lobe is 0.132279 of the peak (extremum of the jinc).
    assert found.side_lobe_without == pytest.approx((0.132279, 0.132279), rel=0.05)
    assert found.broadening[0] == pytest.approx(found.broadening[1], rel=0.05)
    assert min(found.broadening) > 1.05


def test_linear_order_blurs_along_the_phase_axis_alone():
    pattern = Pattern(np.ones((64, 48), dtype=bool), calibration=(0, 0))
    played = order_pattern(pattern, train_length=32, spacing_ms=4.0)
    u, v = decay_spread(played.pattern, played.times_ms, 60.0).broadening
    assert u > 1.1
    assert v == pytest.approx(1.0, abs=1e-9)


def test_first_echoes_at_the_rim_raise_side_lobes():
    # Centre on a middle echo: the outermost bands come first and weigh most, as a high-pass does.
    pattern = Pattern(np.ones(128, dtype=bool), calibration=(0,))
    outward, middle = (
        order_pattern(
            pattern, train_length=16, scheme="centre-out", spacing_ms=5.0, echo_time_ms=time
        )
        for time in (5.0, 35.0)
    )
    plain = decay_spread(outward.pattern, outward.times_ms, 50.0)
    rimmed = decay_spread(middle.pattern, middle.times_ms, 50.0)
    assert plain.side_lobe[0] < plain.side_lobe_without[0] < rimmed.side_lobe[0]


def test_every_frame_has_its_own_spread():
    pattern = draw_entry({"law": "power", "calibration": 12}, (64, 48), 4, 0, frames=2)
    played = order_pattern(pattern, train_length=16, scheme="radial-sector", spacing_ms=4.0)
    first, second = (decay_spread(played.pattern, played.times_ms, 50.0, f) for f in range(2))
    assert first.width == pytest.approx(second.width, rel=0.02)
    assert first.width != second.width


def test_bad_input():
    played = train("linear", 16)
    with pytest.raises(PatternError, match=r"T2 = 0\.0 ms is not above 0"):
        decay_spread(played.pattern, played.times_ms, 0.0)
    with pytest.raises(PatternError, match="no order"):
        decay_spread(Pattern(np.ones(16, dtype=bool)), played.times_ms, 50.0)
