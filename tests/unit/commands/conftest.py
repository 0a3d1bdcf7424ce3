"""The command line, called in this process as the shell would call it."""

from __future__ import annotations

import sys
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pytest

from breakstep.cli import main

TINY = ("--dispatch", "serial", "--set", "mesh.zones=[12]", "--set", "mesh.tile=[3]", "--set", "run.cycles=3")
"""A run of a shipped one-dimensional scenario that takes milliseconds; options."""


@dataclass(frozen=True)
class Answer:
    """What a call left: exit code and both streams."""

    code: int
    out: str
    err: str

    @property
    def complaints(self) -> list[str]:
        """Lines of standard error."""
        return self.err.splitlines()


Shell = Callable[..., Answer]


@pytest.fixture
def breakstep(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], tmp_path: Path) -> Shell:
    """Call the program in an empty folder; what it raises instead of exiting comes through."""
    folder = tmp_path / "here"
    folder.mkdir()
    monkeypatch.chdir(folder)

    def call(*arguments: object) -> Answer:
        monkeypatch.setattr(sys, "argv", ["breakstep", *map(str, arguments)])
        capsys.readouterr()
        with pytest.raises(SystemExit) as stopped:
            main()
        told = capsys.readouterr()
        return Answer(int(stopped.value.code or 0), told.out, told.err)

    return call


def files(folder: Path) -> list[str]:
    """Everything below a folder."""
    return sorted(str(path.relative_to(folder)) for path in folder.rglob("*"))


def refused(answer: Answer, *sentences: str) -> None:
    """Exit code 2, nothing on standard output, and on standard error just these sentences, in parts."""
    assert answer.code == 2
    assert answer.out == ""
    assert "Traceback" not in answer.err
    assert len(answer.complaints) == len(sentences), answer.err
    for line, sentence in zip(answer.complaints, sentences, strict=True):
        assert line.startswith("breakstep: ")
        assert sentence in line
