"""A starting point: two files that run as they are, and nothing of the user's overwritten."""

from __future__ import annotations

from pathlib import Path

import pytest

from breakstep.profile.store import read_profile
from tests.unit.commands.conftest import Shell, files, refused


def test_what_is_written_runs(breakstep: Shell) -> None:
    answer = breakstep("new", "mine")
    assert answer.code == 0
    assert answer.err == ""
    assert answer.out == "mine.py and mine.toml are written; try: breakstep run mine.toml\n"
    assert files(Path.cwd()) == ["mine.py", "mine.toml"]
    for source in ("mine.toml", "mine.py"):
        done = breakstep("run", source, "--dispatch", "serial", "--out", f"out-{source}")
        assert (done.code, done.err) == (0, "")
    one, two = (read_profile(Path(f"out-{source}")).manifest for source in ("mine.toml", "mine.py"))
    assert one["digest"] == two["digest"]
    assert one["cycles"] == 20
    assert len(one["mesh"]["tiles"]) == 16


def test_both_ways_agree_and_the_state_moves(breakstep: Shell) -> None:
    breakstep("new", "mine")
    small = ("--set", "code.arguments.zones=[32, 32]", "--set", "run.cycles=6", "--dispatch", "serial")
    answer = breakstep("compare", "mine.toml", *small, "--pairs", "1", "--out", "both")
    assert answer.code == 0
    assert "Same bits in all runs" in " ".join(answer.out.split())
    fields = read_profile(Path("both/tasked-1")).fields
    assert float(fields["w"].max()) > 0.0
    assert float((fields["u"] + fields["w"]).max()) < 1.2  # an upwind step makes no new maxima; the bump is 1.1 high


@pytest.mark.parametrize("there", ["mine.py", "mine.toml"])
def test_nothing_is_overwritten(breakstep: Shell, there: str) -> None:
    Path(there).write_text("my own", encoding="utf-8")
    refused(breakstep("new", "mine"), f"{there} would be overwritten; choose another name")
    assert files(Path.cwd()) == [there]
    assert Path(there).read_text(encoding="utf-8") == "my own"


@pytest.mark.parametrize("name", ["numpy", "class", "json", "breakstep"])
def test_names_that_python_has_taken(breakstep: Shell, name: str) -> None:
    refused(breakstep("new", name), "choose another name")
    assert files(Path.cwd()) == []


@pytest.mark.parametrize("name", ["my-own", "3d", "a/b", "é"])
def test_names_that_cannot_be(breakstep: Shell, name: str) -> None:
    refused(breakstep("new", name), "cannot name a file of code: expected letters, digits and underscores")
    assert files(Path.cwd()) == []


def test_a_folder_that_cannot_be_written(breakstep: Shell, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    gone = tmp_path / "gone"
    gone.mkdir()
    monkeypatch.chdir(gone)
    gone.rmdir()
    refused(breakstep("new", "mine"), "mine.py cannot be written")
