"""Scan time of a protocol's arms: acquired steps against image matrix, calibration, averages."""

from __future__ import annotations

import pytest
from texts import ANKLE_2D, KNEE_3D, changed

from mrics.errors import ProtocolError
from mrics.protocol import from_text, scan_time
from mrics.sampling import draw_entry


def arm_times(text: str, grid: tuple[int, ...], **keys):
    protocol = from_text(text, "p.toml")
    return [
        scan_time(protocol, draw_entry(a.sampling, grid, a.acceleration, 1), arm=a, **keys)
        for a in protocol.arms()
    ]


def test_time_of_today_is_what_the_protocol_says_the_console_shows():
    # 3-D: TR x phase steps x partition steps = 12 ms x 300 x 112 = 403.2 s fully sampled.
    today = arm_times(KNEE_3D, (300, 112))[0]
    assert today.full_scan_time_s == pytest.approx(403.2)
    assert today.scan_time_s == pytest.approx(403.2 / 2)
    assert not today.findings


@pytest.mark.parametrize(
    ("acceleration", "calibration", "lines", "net"),
    [(2, 24, 140, 1.8286), (3, 24, 101, 2.5347), (4, 24, 82, 3.1220), (4, 32, 88, 2.9091)],
)
def test_net_acceleration_with_calibration_lines(acceleration, calibration, lines, net):
    # Counted for N = 256: lattice through N//2, calibration N//2 - n/2 ... N//2 + n/2 - 1.
    text = changed(
        ANKLE_2D, 'law = "uniform"', f'pattern = "equispaced"\ncalibration = {calibration}'
    )
    text = changed(text, "acceleration = 2", f"acceleration = {acceleration}")
    text = changed(text, "phase_steps = 224", "phase_steps = 256")
    text = changed(text, "turbo-spin", "spin")
    for key in ("echo_train_length = 12\n", "echo_spacing_ms = 9\n", "averages = 4\n"):
        text = changed(text, key, "")
    (timing,) = arm_times(text, (256,))
    assert timing.acquired == lines
    assert timing.full_scan_time_s / timing.scan_time_s == pytest.approx(net, abs=5e-5)
    (own,) = arm_times(changed(text, "[grid]", 'calibration_scan = "separate"\n[grid]'), (256,))
    # The lattice alone in the main scan, the calibration lines in a scan of their own.
    lattice = -(-256 // acceleration) if acceleration != 3 else 85
    assert own.acquired == lattice
    assert own.scan_time_s == pytest.approx((lattice + calibration) * 2.5)


def test_counts_scale_to_the_acquired_steps():
    # Image matrix 150 x 56, half the acquired steps along both axes: same R, so the same time.
    time = arm_times(KNEE_3D, (150, 56))[0]
    assert time.full_scan_time_s == pytest.approx(403.2)
    assert time.scan_time_s == pytest.approx(403.2 / 2)
    assert any("phase_steps = 300 differs from the image matrix 150" in f for f in time.findings)


def test_steps_left_out_are_assumed_and_said():
    text = changed(KNEE_3D, "phase_steps = 300\n", "")
    time = arm_times(text, (200, 112))[0]
    assert time.full == 200 * 112
    assert any("taken as the image matrix, 200 (assumed)" in f for f in time.findings)


def test_slices_from_the_grid_section_or_the_scan():
    assert arm_times(ANKLE_2D, (224,))[0].slices_per_package == 20
    text = changed(ANKLE_2D, "slices = 20\n", "")
    assert arm_times(text, (224,), slices=44)[0].packages == 2
    assert any("number of slices is not given" in f for f in arm_times(text, (224,))[0].findings)


def test_averages_of_an_arm():
    text = changed(ANKLE_2D, 'law = "uniform"', 'law = "uniform"\naverages = 1')
    (timing,) = arm_times(text, (224,))
    assert timing.full_scan_time_s == pytest.approx(190.0)
    assert timing.scan_time_s == pytest.approx(2.5 * 10)


def test_impossible_timings_name_file_and_line():
    text = changed(ANKLE_2D, "echo_time_ms = 36", "echo_time_ms = 136")
    with pytest.raises(ProtocolError, match="outside the echo train") as caught:
        arm_times(text, (224,))
    assert caught.value.where == "p.toml, line 6, key sequence.echo_time_ms"
