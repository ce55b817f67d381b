"""The house rules that can be read off the source: import direction, file length, public face."""

import ast
import json
import subprocess
import sys
from pathlib import Path

import pytest

import mrics

ROOT = Path(mrics.__file__).parent
# From the top of the house down; a room imports only rooms after its own.
ROOMS = [
    "cli",
    "report",
    "study",
    "protocol",
    "quality",
    "recovery",
    "encoding",
    "sampling",
    "scan",
    "phantom",
    "numerics",
    "caution",
    "errors",
]
FILES = sorted(p for p in ROOT.rglob("*.py") if "_shipped" not in p.parts)


def room_of(path: Path) -> str:
    return path.relative_to(ROOT).parts[0].removesuffix(".py")


def imported_rooms(path: Path) -> set[str]:
    rooms: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text())):
        names: list[str] = []
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom) and node.module and node.level == 0:
            names = [node.module, *(f"{node.module}.{alias.name}" for alias in node.names)]
        for name in names:
            parts = name.split(".")
            if parts[0] == "mrics" and len(parts) > 1 and parts[1] in ROOMS:
                rooms.add(parts[1])
    return rooms


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(ROOT)))
def test_imports_go_downward(path: Path) -> None:
    room = room_of(path)
    if room == "__init__":
        return
    assert room in ROOMS, f"{room} is not a room of the house"
    upward = {r for r in imported_rooms(path) if ROOMS.index(r) < ROOMS.index(room)}
    assert not upward, f"{path.name} in {room} imports {upward}, which sits above it"


def test_the_public_face_is_sorted_and_real() -> None:
    assert mrics.__all__ == sorted(mrics.__all__)
    for name in mrics.__all__:
        assert getattr(mrics, name).__doc__


def test_only_one_file_calls_an_fft() -> None:
    callers = [
        str(p.relative_to(ROOT))
        for p in FILES
        if any(word in p.read_text() for word in ("scipy.fft", "np.fft", "numpy.fft"))
    ]
    assert callers == ["numerics/fourier.py"]


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(ROOT)))
def test_no_file_is_over_500_lines(path: Path) -> None:
    assert len(path.read_text().splitlines()) <= 500


def test_importing_mrics_loads_nothing_heavy() -> None:
    code = (
        "import sys, json, mrics; "
        "print(json.dumps([m for m in ('typer', 'pydantic', 'matplotlib', 'numba', 'rich') "
        "if m in sys.modules]))"
    )
    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert json.loads(out.stdout) == []


def test_a_plan_loads_no_package_it_does_not_need() -> None:
    protocol = ROOT.parent / "protocols" / "knee_gre3d.toml"
    code = (
        "import sys, json; from mrics.protocol import load_protocol; "
        "from mrics.study import plan_study; from mrics.cli.tables import plan_table; "
        "plan_table(plan_study(load_protocol(sys.argv[1]))); "
        "print(json.dumps([m for m in ('matplotlib', 'numba', 'rich', 'scipy.ndimage', 'scipy.fft',"
        " 'scipy.sparse', 'scipy.stats') if m in sys.modules]))"
    )
    command = [sys.executable, "-c", code, str(protocol)]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    assert json.loads(done.stdout) == []
