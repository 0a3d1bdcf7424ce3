"""``ledger`` on folders that are no profile, or no longer."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from pathlib import Path

import pytest

from breakstep.profile.store import write_profile
from tests.unit.commands.conftest import Shell, files, refused
from tests.unit.profile.sketch import draw, with_fields


@pytest.fixture
def profile(breakstep: Shell) -> Path:
    """A sound profile in the current folder."""
    write_profile(with_fields(draw("0.0 |AAAABBBB|\n1.0 |CCCC.DDD|", "A>B, C>D")), Path("mine"))
    return Path("mine")


def remove(name: str) -> Callable[[Path], None]:
    """Delete one file."""
    return lambda folder: (folder / name).unlink()


def cut(name: str) -> Callable[[Path], None]:
    """Cut one file in half."""
    return lambda folder: (folder / name).write_bytes(
        (folder / name).read_bytes()[: (folder / name).stat().st_size // 2]
    )


def replaced(name: str, content: bytes) -> Callable[[Path], None]:
    """Put something else into one file."""
    return lambda folder: (folder / name).write_bytes(content) and None  # type: ignore[func-returns-value]


def of_another_version(folder: Path) -> None:
    """A manifest of the future."""
    file = folder / "manifest.json"
    file.write_text(json.dumps(json.loads(file.read_text()) | {"schema_version": 99}))


def without_fields(folder: Path) -> None:
    """Final fields that somebody deleted to save space."""
    shutil.rmtree(folder / "fields.zarr")


@pytest.mark.parametrize(
    ("damage", "sentence"),
    [
        (remove("manifest.json"), "mine: not a complete profile, manifest.json is missing"),
        (remove("tasks.parquet"), "mine/tasks.parquet: expected the table tasks, the file is missing"),
        (cut("tasks.parquet"), "mine/tasks.parquet: cannot be read as Parquet"),
        (cut("edges.parquet"), "mine/edges.parquet: cannot be read as Parquet"),
        (cut("manifest.json"), "mine/manifest.json: cannot be read as JSON"),
        (replaced("manifest.json", b"\x00\xff"), "mine/manifest.json: cannot be read as JSON"),
        (replaced("manifest.json", b"[]"), "mine/manifest.json: expected a JSON object, not list"),
        (replaced("threads.parquet", b"thesis"), "mine/threads.parquet: cannot be read as Parquet"),
        (of_another_version, "mine/manifest.json: schema_version is 99, this program reads version 1"),
        (without_fields, "mine/fields.zarr"),
    ],
)
def test_a_damaged_profile(breakstep: Shell, profile: Path, damage: Callable[[Path], None], sentence: str) -> None:
    damage(profile)
    before = files(profile)
    refused(breakstep("ledger", profile, "--json", "mine.json"), sentence)
    assert files(profile) == before
    assert not Path("mine.json").exists()


def test_folders_that_are_no_profile(breakstep: Shell, profile: Path) -> None:
    refused(breakstep("ledger", "gone"), "gone: expected a profile folder, there is none; check the path")
    refused(breakstep("ledger", profile / "tasks.parquet"), "expected a profile folder, there is none")
    refused(breakstep("ledger", "."), "manifest.json is missing; give one of the 1 profiles in it: mine")
    Path("papers").mkdir()
    refused(breakstep("ledger", "papers"), "papers: not a complete profile, manifest.json is missing")


def test_a_sound_profile(breakstep: Shell, profile: Path) -> None:
    answer = breakstep("ledger", profile)
    assert (answer.code, answer.err) == (0, "")
    assert answer.out.startswith("drawn, tasked: ")
