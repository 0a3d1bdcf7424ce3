"""The progress bar: on a terminal, and nowhere else."""

from __future__ import annotations

import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

from breakstep.commands.shared import progress_bar
from tests.unit.commands.conftest import TINY

pty = pytest.importorskip("pty")


def test_nothing_where_standard_error_is_no_terminal(capsys: pytest.CaptureFixture[str]) -> None:
    with progress_bar("a run", 10) as tell:
        tell(3)
    told = capsys.readouterr()
    assert (told.out, told.err) == ("", "")


def read_all(end: int) -> str:
    """What the other side wrote, until it is gone."""
    parts = []
    while True:
        try:
            part = os.read(end, 65536)
        except OSError:  # Linux tells the end of a terminal as an error
            part = b""
        if not part:
            return b"".join(parts).decode(errors="replace")
        parts.append(part)


def test_a_bar_on_a_terminal(tmp_path: Path) -> None:
    try:
        mine, theirs = pty.openpty()
    except OSError as error:
        pytest.skip(f"no terminals here: {error}")
    command = [sys.executable, "-m", "breakstep", "run", "shock_tube", *TINY, "--set", "run.cycles=400"]
    environment = {**os.environ, "TERM": "xterm", "COLUMNS": "100"}
    process = subprocess.Popen(command, cwd=tmp_path, env=environment, stdout=subprocess.PIPE, stderr=theirs, text=True)
    os.close(theirs)
    shown = read_all(mine)
    os.close(mine)
    out, _ = process.communicate(timeout=60)
    assert process.returncode == 0
    assert re.search(r"tasked .*/400.* cycles", shown)
    assert out.startswith("shock_tube, tasked: ")
    assert "\x1b" not in out
