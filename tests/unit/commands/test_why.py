"""``breakstep why``: from the shell, on a drawn profile and on the shipped one."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from breakstep.profile.store import write_profile
from tests.unit.commands.conftest import Shell, refused
from tests.unit.profile.sketch import draw, with_fields

SHIPPED = Path(__file__).parents[3] / "profiles" / "single_spark"


@pytest.fixture
def drawn() -> None:
    """A profile in the folder ``mine`` in which D waits 3 ns for A."""
    write_profile(with_fields(draw("0.0 |AAAAABBB|\n1.0 |CC...DDD|", "A>B, A>D, C>D")), Path("mine"))


def test_the_longest_wait(breakstep: Shell, drawn: None) -> None:
    answer = breakstep("why", "mine", "--json", "why.json")
    assert (answer.code, answer.err) == (0, "")
    assert answer.out.startswith("drawn, tasked: the longest wait is 0.003 us. Thread 0 of worker 1 stood idle")
    assert "worker 0 was running work on tile 0 in cycle 0" in answer.out
    assert answer.out.endswith("= the wait\n")
    figures = json.loads(Path("why.json").read_text(encoding="utf-8"))
    assert figures["scenario"] == "drawn"
    assert (figures["wait_ns"], figures["worker"], figures["task"]["tile"]) == (3, 1, 3)
    assert [part["ns"] for part in figures["parts"]] == [3]


def test_a_named_wait(breakstep: Shell, drawn: None) -> None:
    assert "before work on tile 3 in cycle 0 is 0.003 us" in " ".join(
        breakstep("why", "mine", "--tile", "3", "--cycle", "0", "--step", "work").out.split()
    )
    assert "no thread stood idle before a task on tile 0" in breakstep("why", "mine", "--tile", "0,0").out


@pytest.mark.parametrize("mode", ["lockstep", "tasked"])
def test_the_shipped_profile(breakstep: Shell, mode: str) -> None:
    answer = breakstep("why", SHIPPED / mode)
    assert (answer.code, answer.err) == (0, "")
    assert max(map(len, answer.out.splitlines())) <= 80
    assert len(answer.out.splitlines()) <= 30


def test_what_does_not_exist(breakstep: Shell, drawn: None) -> None:
    refused(breakstep("why", "mine", "--tile", "a,b"), "--tile a,b: expected the place of a tile in the grid")
    refused(breakstep("why", "mine", "--tile", "99"), "tile 99: expected a tile of the run")
    refused(breakstep("why", "mine", "--cycle", "7"), "cycle 7: expected a cycle of the run")
    refused(breakstep("why", "mine", "--step", "melt"), "step melt: expected a step of the run, which has work")
    refused(breakstep("why", "none"), "none: expected a profile folder")
    refused(breakstep("why", "mine", "--json", "no/such.json"), "--json no/such.json cannot be written")
