"""What the README prints of a user's own program: copied out of it, run as printed, and it prints what it says."""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

import pytest

from breakstep.scenario.find import library

pytestmark = pytest.mark.cluster

README = Path(__file__).parents[2] / "README.md"


def printed(mark: str) -> str:
    """The block of code between a mark and the next end."""
    found = re.search(
        rf"<!-- {mark} -->\n```\w*\n(.*?)```\n<!-- end -->", README.read_text(encoding="utf-8"), re.DOTALL
    )
    assert found is not None, f"README.md has no block marked {mark}"
    return found.group(1)


def test_the_program_is_the_shipped_one_and_short() -> None:
    program = printed("own code")
    assert program == (library() / "own_step.py").read_text(encoding="utf-8")
    assert len(program.splitlines()) < 60


@pytest.mark.slow
def test_the_program_runs_as_printed(tmp_path: Path) -> None:
    """Six runs on two worker processes; the figures are rounded far above round-off."""
    (tmp_path / "own_step.py").write_text(printed("own code"), encoding="utf-8")
    done = subprocess.run(
        [sys.executable, "own_step.py"], cwd=tmp_path, capture_output=True, text=True, timeout=120, check=False
    )
    assert done.stderr == ""
    assert done.stdout == printed("own output")
    assert len(list((tmp_path / "runs").glob("own_step-*/*/manifest.json"))) == 6
