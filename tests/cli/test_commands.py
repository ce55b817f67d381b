"""Every command as a person runs it, in a process of its own."""

import json
import re
import signal
import subprocess
import sys
from pathlib import Path

import nibabel
import numpy as np
import pytest
from command_line import mrics, refused
from small_study import AFFINE, PROTOCOL, small_object, write_small_study

from mrics.caution import RESEARCH_ONLY
from mrics.protocol import load_protocol


def test_help_names_every_command_and_says_research_only() -> None:
    done = mrics("--help")
    assert done.returncode == 0
    assert RESEARCH_ONLY in re.sub(r"\s+", " ", done.stdout)
    for command in ("demo", "new", "plan", "run", "report"):
        assert re.search(rf"^\s+{command}\b", done.stdout, re.MULTILINE)
        assert f"mrics {command}" in mrics(command, "--help").stdout, "every command has an example"


def test_new_plan_run_report_on_ones_own_scans(tmp_path: Path) -> None:
    write_small_study(tmp_path)
    scans = sorted(tmp_path.glob("object_*.nii.gz"))
    done = mrics("new", *scans, "--out", tmp_path / "mine.toml")
    assert done.returncode == 0, done.stderr
    assert len(load_protocol(tmp_path / "mine.toml").scan_files()) == 2
    refused("new", *scans, "--out", tmp_path / "mine.toml", says="exists")

    done = mrics("plan", tmp_path / "mine.toml", "--page", tmp_path / "patterns.html")
    assert done.returncode == 0, done.stderr
    assert max(len(line) for line in done.stdout.splitlines() if "page:" not in line) <= 100
    assert (tmp_path / "patterns.html").is_file()
    assert RESEARCH_ONLY in done.stdout

    done = mrics("run", tmp_path / "mine.toml", "--out", tmp_path / "out", "--quick")
    assert done.returncode == 0, done.stderr
    assert "verdict:" in done.stdout
    for name in ("results.json", "results.csv", "report.html"):
        assert (tmp_path / "out" / name).is_file()
    page = (tmp_path / "out" / "report.html").read_text()
    assert page.count(RESEARCH_ONLY) >= 2

    (tmp_path / "out" / "report.html").unlink()
    # The page is drawn from the results alone: the scans may be gone.
    for scan in scans:
        scan.unlink()
    done = mrics("report", tmp_path / "out")
    assert done.returncode == 0, done.stderr
    assert (tmp_path / "out" / "report.html").read_text() == page


def test_plan_needs_no_image_data(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=1)
    # Image data that any reading would refuse.
    save(np.full((44, 40, 5), np.nan, np.float32), tmp_path / "object_0.nii.gz")
    done = mrics("plan", protocol)
    assert done.returncode == 0, done.stderr
    # TR 500 ms x 40 lines = 20 s; 20 lines 10 s; round(40/3) = 13 lines 6.5 s.
    assert re.search(r"power law, R = 2\b.* 20 +2\.00 .* 0:10 +0:20", done.stdout), done.stdout
    assert re.search(r"power law, R = 3\b.* 13 +3\.08 .* 0:07 +0:20", done.stdout), done.stdout


def test_debug_shows_the_traceback(tmp_path: Path) -> None:
    done = mrics("plan", tmp_path / "none.toml", "--debug")
    assert "Traceback" in done.stderr


BAD_PROTOCOLS = {
    "axis letters repeated": ('phase_axis = "j"', 'phase_axis = "i"', "axis letters? .*repeat"),
    "R below 1": ("acceleration = [2, 3]", "acceleration = [0.5]", r"acceleration"),
    "unknown key": ("exponent = 3.0", "exponant = 3.0", r"exponant.*exponent"),
    "calibration larger than the grid": (
        "acceleration = [2, 3]\ncalibration = 8",
        "acceleration = [2, 3]\ncalibration = 64",
        r"64.*40",
    ),
    "infeasible R": ("acceleration = [2, 3]", "acceleration = [30]", r"largest"),
    "unknown method": ('method = "zero-filled"', 'method = "zero-fill"', "zero-filled"),
    "not TOML": ("[grid]", "[grid", "TOML"),
}


@pytest.mark.parametrize("case", BAD_PROTOCOLS)
def test_a_bad_protocol_is_refused(case: str, tmp_path: Path) -> None:
    old, new, says = BAD_PROTOCOLS[case]
    assert old in PROTOCOL
    protocol = write_small_study(tmp_path, scans=1, protocol=PROTOCOL.replace(old, new))
    text = refused("run", protocol, "--out", tmp_path / "out", says=says)
    assert "protocol.toml" in text
    assert not (tmp_path / "out").exists()


def test_a_protocol_without_arms_is_refused(tmp_path: Path) -> None:
    start = PROTOCOL.index("[today]")
    end = PROTOCOL.index("[acceptance]")
    protocol = write_small_study(tmp_path, 1, PROTOCOL[:start] + PROTOCOL[end:])
    refused("run", protocol, "--out", tmp_path / "out", says="no arms")
    assert not (tmp_path / "out").exists()


def save(data: np.ndarray, path: Path, affine: np.ndarray = AFFINE) -> None:
    nibabel.save(nibabel.Nifti1Image(data, affine), path)


def bad_scans() -> dict[str, str]:
    return {
        "missing": r"object_\*\.nii\.gz.*matches no file",
        "truncated": "truncated|damaged|ends",
        "not NIfTI": "NIfTI",
        "two axes": "2 ax|2-D",
        "five axes": "5 ax|5-D",
        "NaN": r"3 .*\(2, 3, 1\)",
        "zero": "zero",
    }


@pytest.mark.parametrize("case", bad_scans())
def test_a_bad_scan_is_refused(case: str, tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=1)
    path = tmp_path / "object_0.nii.gz"
    data = small_object(0)
    if case == "missing":
        path.unlink()
    elif case == "truncated":
        path.write_bytes(path.read_bytes()[:3000])
    elif case == "not NIfTI":
        path.write_bytes(b"this is no image" * 40)
    elif case == "two axes":
        save(data[:, :, 0], path)
    elif case == "five axes":
        save(data[..., None, None] * np.ones((2, 2)), path)
    elif case == "NaN":
        data[2, 3, 1] = np.nan
        data[4, 3, 1] = np.inf
        data[9, 9, 4] = np.nan
        save(data, path)
    elif case == "zero":
        save(np.zeros_like(data), path)
    refused("run", protocol, "--out", tmp_path / "out", says=bad_scans()[case])
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize("case", ["shape", "affine", "range"])
def test_a_bad_phase_file_is_refused(case: str, tmp_path: Path) -> None:
    text = PROTOCOL.replace(
        'scans = ["object_*.nii.gz"]',
        'scans = [{ magnitude = "mag.nii.gz", phase = "ph.nii.gz" }]',
    )
    protocol = write_small_study(tmp_path, scans=0, protocol=text)
    data = small_object(0)
    phase = np.angle(data).astype(np.float32)
    save(np.abs(data), tmp_path / "mag.nii.gz")
    says = {"shape": "shape|39", "affine": "affine", "range": "range|phase"}[case]
    if case == "shape":
        save(phase[:, :-1], tmp_path / "ph.nii.gz")
    elif case == "affine":
        save(phase, tmp_path / "ph.nii.gz", AFFINE + np.eye(4) * [2.0, 0, 0, 0])
    else:
        save(phase * 1.7, tmp_path / "ph.nii.gz")
    refused("run", protocol, "--out", tmp_path / "out", says=says)
    assert not (tmp_path / "out").exists()


def test_bad_folders_are_refused(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path / "in", scans=1)
    refused("run", protocol, "--out", tmp_path / "in", says="is not a study")
    refused("run", protocol, "--out", "/proc/mrics-out", says="cannot be written")
    refused("report", tmp_path / "in", says=r"results\.json")
    refused("report", tmp_path / "nowhere", says="nowhere")


def test_the_study_can_be_read_by_json_alone(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=1)
    assert mrics("run", protocol, "--out", tmp_path / "o", "--quick").returncode == 0
    text = (tmp_path / "o" / "results.json").read_text()
    json.loads(text, parse_constant=lambda name: pytest.fail(f"{name} is not JSON"))


def test_ctrl_c_keeps_finished_units_and_says_so(tmp_path: Path) -> None:
    text = PROTOCOL.replace("draws = 2", "draws = 400")
    protocol = write_small_study(tmp_path, scans=1, protocol=text)
    code = "from mrics.cli import main; main()"
    child = subprocess.Popen(
        [sys.executable, "-c", code, "run", str(protocol), "--out", str(tmp_path / "o")],
        stderr=subprocess.PIPE,
        stdout=subprocess.DEVNULL,
        text=True,
    )
    assert child.stderr is not None
    for line in child.stderr:
        if "left" in line:
            break
    child.send_signal(signal.SIGINT)
    rest = child.stderr.read()
    child.stderr.close()
    assert child.wait() == 130
    assert "finished units are kept" in rest
    assert "Traceback" not in rest
    units = json.loads((tmp_path / "o" / "results.json").read_text())["units"]
    assert len(units) > 10
