"""Scan times against worked examples, and timings no scanner can play."""

from __future__ import annotations

import math

import pytest

from mrics.errors import ProtocolError
from mrics.protocol import console_difference, minutes, sequence_time, snr_index
from mrics.protocol.sections import Sequence


def sequence(family: str, repetition_ms: float, **keys) -> Sequence:
    return Sequence(family=family, repetition_time_ms=repetition_ms, **keys)


# Formulas TR x lines x averages (2-D spin and gradient echo), TR x lines x partitions x averages
# (3-D) and TR x ceil(lines / echo train) x averages (turbo spin echo). The first three examples
# are worked in radiology reference pages and examination questions; the fourth follows from the
# formula.
@pytest.mark.parametrize(
    ("played", "lines", "seconds"),
    [
        (sequence("spin-echo-2d", 1000, averages=2), 128, 256.0),
        (sequence("gradient-echo-2d", 450, averages=3), 224, 302.4),
        (sequence("turbo-spin-echo-2d", 2500, averages=4, echo_train_length=12), 224, 190.0),
        (sequence("gradient-echo-3d", 10), 256 * 128, 327.68),
    ],
)
def test_worked_scan_times(played, lines, seconds):
    timing = sequence_time(played, lines, lines)
    assert timing.scan_time_s == pytest.approx(seconds, abs=1e-9)
    assert timing.full_scan_time_s == timing.scan_time_s
    assert timing.saved_s == 0


def test_turbo_spin_echo_rounds_up_to_whole_trains():
    # 224 / 12 = 18.67, so 19 trains (same worked example).
    played = sequence("turbo-spin-echo-2d", 2500, averages=4, echo_train_length=12)
    timing = sequence_time(played, 224, 224)
    assert timing.shots == 19
    assert any("holds 8 of 12 positions: 4 more would cost no time" in f for f in timing.findings)


def test_one_inversion_per_outer_line():
    # 256 outer lines at 2.3 s each: 588.8 s; 140 lines (R = 2 with 24 calibration lines inside):
    # 322.0 s. The structure (inversion before the partition loop) is a textbook's, the times
    # follow.
    played = sequence("inversion-gradient-echo-3d", 2300)
    full = sequence_time(played, 256 * 176, 256 * 176, partitions=176)
    assert full.scan_time_s == pytest.approx(588.8)
    assert full.positions_per_shot == 176
    fast = sequence_time(played, 140 * 176, 256 * 176, partitions=176)
    assert fast.scan_time_s == pytest.approx(322.0)


def test_elliptical_saving():
    # 3-D, TR 10 ms, 256 x 128: an elliptical shutter of area pi/4 takes 257.4 s (area ratio).
    played = sequence("gradient-echo-3d", 10)
    timing = sequence_time(played, round(256 * 128 * math.pi / 4), 256 * 128)
    assert timing.scan_time_s == pytest.approx(257.4, abs=0.05)


@pytest.mark.parametrize(("lines", "factor"), [(160, 0.7906), (192, 0.8660), (224, 0.9354)])
def test_relative_snr_is_the_root_of_the_time(lines, factor):
    # Partial Fourier 5/8, 6/8, 7/8 of 256 lines: noise-only SNR sqrt(f) (arithmetic).
    timing = sequence_time(sequence("gradient-echo-2d", 20), lines, 256)
    assert timing.relative_snr == pytest.approx(factor, abs=5e-5)


def test_relative_snr_counts_averages():
    played = sequence("spin-echo-2d", 500, averages=2)
    timing = sequence_time(played, 64, 256, averages=4)
    # SNR_acc = SNR_full / (g sqrt R) (Pruessmann et al. 1999), times sqrt(2) for twice the
    # averages; g is not in it.
    assert timing.relative_snr == pytest.approx(math.sqrt(2 / 4))
    assert timing.scan_time_s == pytest.approx(0.5 * 64 * 4)
    assert timing.full_scan_time_s == pytest.approx(0.5 * 256 * 2)


def test_snr_index():
    # SNR ~ voxel volume x sqrt(Nx Ny NSA / BW) (Edelstein 1986): in-plane voxel 1 -> 0.5 mm at
    # the same field of view, slice, bandwidth and averages: 1/4 x sqrt 4 = 0.5; four times the
    # averages: x 2; twice the bandwidth: x 0.7071.
    one = snr_index((1, 1, 3), 256, 256, 62500)
    assert snr_index((0.5, 0.5, 3), 512, 512, 62500) / one == pytest.approx(0.5)
    assert snr_index((1, 1, 3), 4 * 256, 256, 62500) / one == pytest.approx(2.0)
    assert snr_index((1, 1, 3), 256, 256, 125000) / one == pytest.approx(0.5**0.5)


def test_readout_time():
    # 256 samples at +-31.25 kHz: 4.096 ms = 1 / (244.141 Hz per pixel) (arithmetic).
    played = sequence("gradient-echo-2d", 20, bandwidth_hz_per_pixel=244.140625)
    assert sequence_time(played, 1, 1).readout_time_s == pytest.approx(4.096e-3)


def test_slices_beyond_one_repetition_become_packages():
    # Echo train 12 x 9 ms, last readout half an echo spacing longer: 112.5 ms a slice, so 22 fit
    # into 2500 ms; 30 slices are 2 packages of 15, 45 are 3 of 15 (arithmetic).
    played = sequence("turbo-spin-echo-2d", 2500, echo_train_length=12, echo_spacing_ms=9)
    for slices, packages, each in ((22, 1, 22), (23, 2, 12), (30, 2, 15), (45, 3, 15)):
        timing = sequence_time(played, 224, 224, slices=slices)
        assert (timing.packages, timing.slices_per_package) == (packages, each)
        assert timing.scan_time_s == pytest.approx(2.5 * 19 * packages)
    assert any("do not fit into one repetition" in f for f in timing.findings)
    assert any("112.5 ms" in f and "give slice_time_ms" in f for f in timing.findings)


def test_short_repetition_plays_slices_one_after_another():
    played = sequence("gradient-echo-2d", 5, echo_time_ms=2, slice_time_ms=5)
    timing = sequence_time(played, 128, 128, slices=10)
    assert (timing.packages, timing.scan_time_s) == (10, pytest.approx(6.4))


def test_dummy_shots_and_frames():
    # Dummy shots come once per package, frames repeat the shots.
    played = sequence("gradient-echo-2d", 100, dummy_shots=10, frames=3, slice_time_ms=60)
    timing = sequence_time(played, 32, 64, slices=2)
    assert timing.packages == 2
    assert timing.scan_time_s == pytest.approx(0.1 * (32 * 3 + 10) * 2)
    assert timing.full_scan_time_s == pytest.approx(0.1 * (64 * 3 + 10) * 2)


def test_separate_calibration_scan():
    inside = sequence("gradient-echo-2d", 20)
    assert sequence_time(inside, 64, 256, calibration=24).calibration_time_s == 0
    own = sequence("gradient-echo-2d", 20, calibration_scan="separate")
    timing = sequence_time(own, 64, 256, calibration=24)
    assert timing.calibration_time_s == pytest.approx(24 * 0.02)
    assert timing.scan_time_s == pytest.approx((64 + 24) * 0.02)
    given = sequence(
        "gradient-echo-2d", 20, calibration_scan="separate", calibration_scan_time_s=12.5
    )
    assert sequence_time(given, 64, 256, calibration=24).scan_time_s == pytest.approx(13.78)


def test_planar_shots():
    # 128 lines in trains of 32 are 4 shots; half of them 2 (arithmetic).
    played = sequence("echo-planar-2d", 3000, echo_train_length=32, echo_spacing_ms=1)
    timing = sequence_time(played, 64, 128)
    assert (timing.shots, timing.full_shots) == (2, 4)
    assert timing.scan_time_s == pytest.approx(6.0)
    single = sequence_time(sequence("echo-planar-2d", 3000, echo_spacing_ms=0.5), 64, 128)
    assert single.scan_time_s == single.full_scan_time_s == pytest.approx(3.0)
    assert any(f.startswith("Single-shot") for f in single.findings)


IMPOSSIBLE = [
    (
        sequence("turbo-spin-echo-2d", 100, echo_train_length=12, echo_spacing_ms=9),
        "lasts 112.5 ms.*longer than repetition_time_ms = 100",
        "at least 112.5, or a shorter echo_train_length",
    ),
    (
        sequence(
            "turbo-spin-echo-2d", 3000, echo_train_length=8, echo_spacing_ms=10, echo_time_ms=120
        ),
        "echo_time_ms = 120 lies outside the echo train.*from 10 to 80 ms",
        "from 10 to 80",
    ),
    (
        sequence("turbo-spin-echo-3d", 1000),
        "needs the length of its echo train",
        "Add echo_train_length",
    ),
    (
        sequence("gradient-echo-3d", 4, echo_time_ms=5),
        "lasts 5 ms.*longer than repetition_time_ms = 4",
        "repetition_time_ms of at least 5",
    ),
    (
        sequence("spin-echo-2d", 500, echo_train_length=4),
        "one position per repetition, but echo_train_length = 4",
        "Remove echo_train_length",
    ),
    (
        sequence(
            "inversion-gradient-echo-3d",
            2300,
            echo_train_length=176,
            echo_spacing_ms=8,
            inversion_time_ms=700,
        ),
        "inversion_time_ms = 700 is too short: the 88 positions.*704 ms",
        "inversion_time_ms above 704",
    ),
    (
        # n_inner x echo spacing < TR_shot - inversion delay: 176 x 8 = 1408 > 2000 - 600.
        sequence(
            "inversion-gradient-echo-3d",
            2000,
            echo_train_length=176,
            echo_spacing_ms=8,
            inversion_time_ms=600,
            order="centre-out",
        ),
        "lasts 2008 ms.*longer than repetition_time_ms = 2000",
        "repetition_time_ms of at least 2008",
    ),
    (
        sequence("inversion-gradient-echo-3d", 2000),
        "number of positions after one inversion is not known",
        "partition_steps",
    ),
    (
        sequence(
            "turbo-spin-echo-2d",
            3000,
            echo_train_length=8,
            echo_spacing_ms=4,
            bandwidth_hz_per_pixel=200,
        ),
        "readout lasts 5 ms.*longer than echo_spacing_ms = 4",
        "echo_spacing_ms above 5, or a bandwidth above 250",
    ),
    (
        sequence(
            "turbo-spin-echo-2d", 3000, echo_train_length=8, echo_spacing_ms=10, slice_time_ms=60
        ),
        "slice_time_ms = 60 is shorter than the 85 ms",
        "slice_time_ms of at least 85",
    ),
    (
        sequence("echo-planar-2d", 100, echo_train_length=128, echo_spacing_ms=1),
        "lasts 128 ms.*longer than repetition_time_ms = 100",
        "repetition_time_ms of at least 128",
    ),
]


@pytest.mark.parametrize(("played", "says", "way_out"), IMPOSSIBLE)
def test_impossible_timings_say_which_number_to_change(played, says, way_out):
    with pytest.raises(ProtocolError, match=f"(?s){says}.*way out.*{way_out}"):
        sequence_time(played, 128 * 128, 128 * 128)


def test_the_least_repetition_time_an_error_names_is_enough():
    played = sequence(
        "inversion-gradient-echo-3d",
        2008,
        echo_train_length=176,
        echo_spacing_ms=8,
        inversion_time_ms=600,
        order="centre-out",
    )
    timing = sequence_time(played, 176 * 10, 176 * 10)
    assert timing.shots == 10


@pytest.mark.parametrize(
    ("counts", "says"),
    [
        ((0, 10), "acquired = 0.*from 1 to 10"),
        ((11, 10), "acquired = 11.*from 1 to 10"),
        ((1, 0), "full = 0"),
    ],
)
def test_counts_that_do_not_fit(counts, says):
    with pytest.raises(ProtocolError, match=f"(?s){says}"):
        sequence_time(sequence("gradient-echo-2d", 10), *counts)


def test_console_time_is_compared():
    played = sequence("gradient-echo-3d", 12, console_scan_time_s=390)
    near = console_difference(played, 390 * 1.0199)
    assert near == "Computed 6:38 against 6:30 on the console (+2.0%)."
    far = console_difference(played, 390 * 1.03) or ""
    assert far.startswith("Warning: Computed 6:42 against 6:30 on the console (+3.0%).")
    assert "Check repetition time" in far
    assert "(-2.6%)" in (console_difference(played, 380) or "")
    assert console_difference(sequence("gradient-echo-3d", 12), 1.0) is None


def test_minutes():
    assert [minutes(s) for s in (0.4, 59.5, 60, 402.7, 3600)] == [
        "0:00",
        "1:00",
        "1:00",
        "6:43",
        "60:00",
    ]
