"""Running a command as a person does, in a process of its own or in this one."""

import contextlib
import io
import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

from mrics.cli import main


def mrics(*arguments: object, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-c", "from mrics.cli import main; main()", *map(str, arguments)]
    environment = {**os.environ, "COLUMNS": "100", "NO_COLOR": "1"}
    return subprocess.run(command, capture_output=True, text=True, cwd=cwd, env=environment)


def refused(*arguments: object, says: str) -> str:
    """Run a command in this process; it must be refused: status 2, a message, nothing raised."""
    complaint = io.StringIO()
    with pytest.MonkeyPatch.context() as patch, contextlib.redirect_stderr(complaint):
        patch.setattr(sys, "argv", ["mrics", *map(str, arguments)])
        with pytest.raises(SystemExit) as stop:
            main()
    text = re.sub(r"\s+", " ", complaint.getvalue())
    assert stop.value.code == 2, text
    assert re.search(says, text), text
    return text
