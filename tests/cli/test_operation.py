"""Runs under the conditions people work in: no terminal, no home, a full disk, a second user."""

from __future__ import annotations

import fcntl
import json
import os
import pty
import re
import shutil
import signal
import struct
import subprocess
import sys
import tempfile
import termios
from collections.abc import Iterator
from pathlib import Path

import matplotlib
import nibabel
import pytest
from small_disk import mounted
from small_study import AFFINE, PROTOCOL, small_object, write_small_study

import mrics
from mrics.cli.main import app
from mrics.study import run_study
from mrics.study.ledger import LEDGER, Ledger

COMMAND = [sys.executable, "-c", "from mrics.cli import main; main()"]
# A unit of this protocol takes longer than anyone waits.
ENDLESS = PROTOCOL.replace(
    'method = "zero-filled"',
    'method = "wavelet"\nshift = "none"\nweight = 1.0\niterations = 100000\ntolerance = 1e-300',
)


def environment(**more: str) -> dict[str, str]:
    """As little as a job of a batch system may have: no home, no locale, no terminal.

    The fonts that were found before are given; looking for them again takes seconds.
    """
    return {
        "PATH": os.environ["PATH"],
        "PYTHONPATH": str(Path(mrics.__file__).parents[1]),
        "NUMBA_CACHE_DIR": os.environ.get("NUMBA_CACHE_DIR", ""),
        "MPLCONFIGDIR": matplotlib.get_cachedir(),
        **more,
    }


def run(*arguments: object, **more: str) -> subprocess.CompletedProcess[str]:
    command = [*COMMAND, *map(str, arguments)]
    return subprocess.run(
        command, capture_output=True, text=True, errors="replace", env=environment(**more)
    )


def test_every_command_has_an_example() -> None:
    for command in app.registered_commands:
        assert command.callback is not None
        name, text = command.callback.__name__, command.callback.__doc__ or ""
        assert re.search(rf"^ +Example: mrics {name}\b", text, re.MULTILINE), name


def test_no_home_no_terminal_plain_locale_and_odd_paths(tmp_path: Path) -> None:
    folder = tmp_path / "Ärzte, Knie 膝 1"
    text = PROTOCOL.replace("Small object", "Knie – schneller")
    protocol = write_small_study(folder, scans=0, protocol=text)
    for field, name in (("descrip", "object_0.nii.gz"), ("aux_file", "object_é ü.nii.gz")):
        image = nibabel.Nifti1Image(small_object(len(name)), AFFINE)
        image.header[field] = b"Zebulon"
        nibabel.save(image, folder / name)
    protocol.write_text(text.replace("draws = 2", "draws = 3"), encoding="utf-8")
    command = ("run", protocol, "--out", folder / "out", "--workers", 1, "--verbose")
    done = run(*command, LC_ALL="C", PYTHONIOENCODING="latin-1")
    assert done.returncode == 0, done.stderr
    assert "Knie ? schneller" in done.stdout
    # Plain lines, no colours, no cursor movements.
    assert re.search(r"^\d+/14 units, \d+:\d\d left \(", done.stderr, re.MULTILINE)
    assert "\x1b" not in done.stdout + done.stderr
    # The log tells what was done and when, and nothing that the header says in words.
    assert re.search(r"^ +\d+\.\d\d s  read object_0: 44 x 40 x 5, complex, sigma", done.stderr, 8)
    assert len(re.findall(r"s  unit \d+: ", done.stderr)) == 14
    assert "Zebulon" not in done.stderr
    assert str(tmp_path) not in done.stderr
    assert (folder / "out" / "report.html").is_file()


def test_a_terminal_of_80_columns_without_colours(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=1)
    try:
        ours, theirs = pty.openpty()
    except OSError as error:
        pytest.skip(f"no pseudo-terminal on this machine: {error}")
    fcntl.ioctl(theirs, termios.TIOCSWINSZ, struct.pack("HHHH", 24, 80, 0, 0))
    command = [*COMMAND, "run", str(protocol), "--out", str(tmp_path / "o"), "--workers", "1"]
    child = subprocess.Popen(
        command, stdout=theirs, stderr=theirs, env=environment(NO_COLOR="1", TERM="xterm")
    )
    os.close(theirs)
    shown = b""
    while True:
        try:
            part = os.read(ours, 65536)
        except OSError:
            break
        if not part:
            break
        shown += part
    os.close(ours)
    assert child.wait() == 0, shown
    text = shown.decode()
    assert not re.search(r"\x1b\[(\d+;)*(3[0-7]|38|4[0-7]|48|9[0-7])(;\d+)*m", text), "colours"
    assert "5/5" in text, "the bar"
    lines = re.sub(r"\x1b\[[0-9;?]*[A-Za-z]", "", text).replace("\r", "\n").splitlines()
    # The caution is one sentence and folds by itself.
    long = [line for line in lines if len(line) > 80 and "Research" not in line]
    assert not [line for line in long if str(tmp_path) not in line]


def until(child: subprocess.Popen[str], word: str) -> None:
    assert child.stderr is not None
    seen = []
    for line in child.stderr:
        seen.append(line)
        if word in line:
            return
    pytest.fail(f"the run ended without {word!r}: {''.join(seen)}")


def test_stopped_once_it_finishes_the_unit_and_keeps_it(tmp_path: Path) -> None:
    text = PROTOCOL.replace("draws = 2", "draws = 400")
    protocol = write_small_study(tmp_path, scans=1, protocol=text)
    command = [*COMMAND, "run", str(protocol), "--out", str(tmp_path / "o"), "--workers", "1"]
    child = subprocess.Popen(command, stderr=subprocess.PIPE, text=True, env=environment())
    until(child, " left ")
    # Batch systems send this; Ctrl-C, in the next test, is handled alike.
    child.send_signal(signal.SIGTERM)
    until(child, "stopping when the units at work are done")
    assert child.stderr is not None
    rest = child.stderr.read()
    assert child.wait() == 130
    assert "finished units are kept" in rest
    assert "Traceback" not in rest
    child.stderr.close()
    with Ledger(tmp_path / "o") as ledger:
        kept = ledger._base.execute("SELECT count(*) FROM units").fetchone()[0]
    assert 1 <= kept < 401
    assert len(json.loads((tmp_path / "o" / "results.json").read_text())["units"]) == kept


def test_stopped_twice_it_ends_within_the_unit(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=1, protocol=ENDLESS)
    command = [*COMMAND, "run", str(protocol), "--out", str(tmp_path / "o"), "--workers", "1"]
    child = subprocess.Popen(command, stderr=subprocess.PIPE, text=True, env=environment())
    until(child, "1/5 units")
    child.send_signal(signal.SIGINT)
    until(child, "Ctrl-C again stops at once")
    child.send_signal(signal.SIGINT)
    assert child.stderr is not None
    rest = child.stderr.read()
    child.stderr.close()
    assert child.wait() == 130
    assert "Traceback" not in rest
    assert len(json.loads((tmp_path / "o" / "results.json").read_text())["units"]) == 1


def test_a_full_disk_is_told(tmp_path: Path) -> None:
    protocol = write_small_study(tmp_path, scans=2)
    with mounted(tmp_path / "disk") as disk:
        done = run("run", protocol, "--out", disk / "o", "--workers", 1)
        assert done.returncode == 2, done.stderr
        assert re.search(r"No space left|disk is full", done.stderr)
        assert "way out" in done.stderr
        assert "Traceback" not in done.stderr


@pytest.fixture
def open_folder() -> Iterator[Path]:
    """A folder that every user can read; pytest's own is closed to others."""
    folder = Path(tempfile.mkdtemp(prefix="mrics-open-"))
    folder.chmod(0o755)
    yield folder
    shutil.rmtree(folder)


def as_another_user(*arguments: object) -> subprocess.CompletedProcess[str]:
    if os.getuid() != 0 or shutil.which("setpriv") is None:
        pytest.skip("needs root and setpriv to become a second user")
    other = ["setpriv", "--reuid=65534", "--regid=65534", "--clear-groups"]
    probe = [*other, sys.executable, "-c", "import numpy"]
    if subprocess.run(probe, capture_output=True, env=environment()).returncode:
        pytest.skip("a second user cannot read this installation")
    command = [*other, *COMMAND, *map(str, arguments)]
    return subprocess.run(command, capture_output=True, text=True, env=environment())


def test_a_second_user_reads_but_is_refused_where_he_cannot_write(open_folder: Path) -> None:
    protocol = write_small_study(open_folder, scans=1)
    out = open_folder / "out"
    run_study(protocol, out, quick=True)
    before = {p: p.stat().st_mtime_ns for p in out.rglob("*")}
    # Neither his home nor the installation can be written: kernels are kept elsewhere.
    planned = as_another_user("plan", protocol)
    assert planned.returncode == 0, planned.stderr
    for command in (
        ("run", protocol, "--out", out, "--quick", "--workers", 1),
        ("new", open_folder / "object_0.nii.gz", "--out", open_folder / "mine.toml"),
    ):
        done = as_another_user(*command)
        assert done.returncode == 2, (command, done.stderr)
        assert re.search("cannot be written|ermission denied", done.stderr), done.stderr
        assert "way out" in done.stderr
        assert "Traceback" not in done.stderr
    assert {p: p.stat().st_mtime_ns for p in out.rglob("*")} == before
    assert LEDGER in {p.name for p in out.iterdir()}
