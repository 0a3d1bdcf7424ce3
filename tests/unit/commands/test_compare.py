"""``compare``: order of runs, folders, figures, and what happens when the bits differ."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import ClassVar

import pytest

from breakstep.commands import compare as command
from breakstep.engine.run import Dispatch, Progress, RunOptions, RunResult
from breakstep.engine.serial import SerialDispatch
from breakstep.profile.store import read_profile
from breakstep.report.comparison import Difference
from breakstep.scenario.load import Scenario
from breakstep.steps.splitting import lie
from breakstep.steps.step import Array, Call, Read, Step
from tests.toys import Arrays, Toy, dt_reduction, smooth
from tests.unit.commands.conftest import TINY, Shell
from tests.unit.report.test_figures import BESIDE, BESIDE_OF_A_RUN, DOCUMENTED, DOCUMENTED_OF_A_RUN


def figures(path: str) -> dict[str, object]:
    """The JSON file, which holds no NaN."""

    def refuse(constant: str) -> None:
        raise AssertionError(constant)

    found: dict[str, object] = json.loads(Path(path).read_text(encoding="utf-8"), parse_constant=refuse)
    return found


def test_a_comparison(breakstep: Shell) -> None:
    answer = breakstep("compare", "shock_tube", *TINY, "--out", "both", "--json", "both.json", "--pairs", "2")
    assert (answer.code, answer.err) == (0, "")
    lines = answer.out.splitlines()
    assert lines[0].startswith("shock_tube: ")
    assert "Same bits in all runs." in " ".join(lines[:5])
    assert lines[-1] == "Profiles: both"
    assert len(lines) <= 26
    found = figures("both.json")
    assert set(found) == DOCUMENTED | BESIDE
    assert (found["identical"], found["pairs"], found["workers"], found["dispatch"]) == (True, 2, 1, "serial")
    for mode in ("lockstep", "tasked"):
        assert set(found[mode]) == DOCUMENTED_OF_A_RUN | BESIDE_OF_A_RUN  # type: ignore[call-overload]
    assert found["lockstep"]["digest"] == found["tasked"]["digest"]  # type: ignore[index]
    assert sorted(path.name for path in Path("both").iterdir()) == ["lockstep-1", "lockstep-2", "tasked-1", "tasked-2"]
    assert all(read_profile(path).manifest["status"] == "complete" for path in Path("both").iterdir())


def test_one_pair_says_one_pair(breakstep: Shell) -> None:
    answer = breakstep("compare", "shock_tube", *TINY, "--pairs", "1")
    said = " ".join(answer.out.split())
    assert "1 worker, serial dispatch, 1 pair: " in said
    assert "use --pairs 3 or more" in said


def test_some_barriers_are_compared_under_their_names(breakstep: Shell) -> None:
    answer = breakstep(
        *("compare", "shock_tube", *TINY, "--pairs", "2", "--barriers", "sweep_x"),
        *("--out", "both", "--json", "both.json"),
    )
    assert answer.code == 0
    assert "the barrier sweep_x" in answer.out.replace("\n", " ")
    assert "lockstep" not in answer.out
    assert "1 barrier" in answer.out
    assert read_profile(Path("both/lockstep-1")).manifest["barriers"] == ["sweep_x"]
    assert figures("both.json")["lockstep"]["barriers"] == ["sweep_x"]  # type: ignore[index]


def test_tasked_against_itself(breakstep: Shell) -> None:
    answer = breakstep("compare", "shock_tube", *TINY, "--pairs", "2", "--barriers", "tasked")
    assert answer.code == 0
    assert answer.out.startswith("shock_tube: tasked against tasked ")


class Listening(SerialDispatch):
    """Notes the barriers of each run."""

    def __init__(self) -> None:
        self.heard: list[bool] = []

    def run(self, program: object, options: RunOptions, progress: Progress | None = None) -> RunResult:
        """Run serially."""
        self.heard.append(bool(options.barriers))
        return super().run(program, options, progress)  # type: ignore[arg-type]


def test_pairs_alternate_in_order(tmp_path: Path) -> None:
    """Lockstep first, tasked first, lockstep first: a host that drifts favours neither."""
    session = command.Session.load("shock_tube", ("mesh.zones=[12]", "mesh.tile=[3]", "run.cycles=1"))
    engine = Listening()
    compared = command.compare_pairs(session, engine, "lockstep", tmp_path, 3)
    assert engine.heard == [True, False, False, True, True, False]
    assert [bool(profile.manifest["barriers"]) for profile in compared.lockstep] == [True] * 3
    assert [bool(profile.manifest["barriers"]) for profile in compared.tasked] == [False] * 3


@dataclass(frozen=True)
class Forgetful:
    """A kernel that is no function of what it is given: it counts its calls, and the count gets into one zone."""

    tile: int
    cycle: int
    calls: ClassVar[int] = 0

    def __call__(self, arrays: Arrays, call: Call) -> Mapping[str, Array]:
        Forgetful.calls += 1
        made = arrays["u"].copy()
        if (call.tile, call.cycle) == (self.tile, self.cycle):
            made[0, 1, 0, 0] += 1e-9 * Forgetful.calls
        return {"u": made}


def hide_a_counter(monkeypatch: pytest.MonkeyPatch, tile: int, cycle: int) -> None:
    """Three steps, of which the second has the counter; halos carry the difference on from there."""
    toy = Toy((12,), repeats=False, cycles=3)
    steps = [
        Step("smooth", smooth, (Read("u", (1, 0, 0)),), ("u",)),
        Step("forget", Forgetful(tile, cycle), (Read("u", (0, 0, 0)),), ("u",)),
        *toy.steps()[1:3],
    ]
    problem = replace(toy.problem(), splitting=lie(steps, [dt_reduction(1)]))
    monkeypatch.setattr(Scenario, "problem", lambda self: problem)


@pytest.mark.parametrize(("tile", "cycle"), [(2, 1), (0, 2)])
def test_the_first_task_that_differs_is_named(
    breakstep: Shell, monkeypatch: pytest.MonkeyPatch, tile: int, cycle: int
) -> None:
    hide_a_counter(monkeypatch, tile, cycle)
    answer = breakstep(
        *("compare", "shock_tube", *TINY, "--set", "run.fuse=false"),
        *("--pairs", "1", "--out", "both", "--json", "both.json"),
    )
    assert (answer.code, answer.err) == (1, "")
    said = " ".join(answer.out.split())
    assert said.startswith(
        "shock_tube: the runs do NOT end with the same bits; they differ first in u after step forget on tile"
        f" {tile} in cycle {cycle}."
    )
    assert "Same bits" not in said
    found = figures("both.json")
    assert found["identical"] is False
    assert found["difference"] == {"field": "u", "tile": tile, "step": "forget", "cycle": cycle}
    assert {path.name for path in Path("both").iterdir()} >= {"lockstep-traced", "tasked-traced"}


def test_a_difference_that_does_not_come_back_is_told_by_field_and_tile(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The traced runs agree with each other; what is known of the first ones is still said."""
    session = command.Session.load("shock_tube", ("mesh.zones=[12]", "mesh.tile=[3]", "run.cycles=1"))
    engine: Dispatch = SerialDispatch()
    compared = command.compare_pairs(session, engine, "lockstep", tmp_path, 1)
    changed = compared.tasked[0]
    changed.manifest["digests"]["gas"][2] = "0" * 64
    found = command._difference(session, engine, "lockstep", tmp_path, compared.lockstep, [changed])  # type: ignore[arg-type]
    assert found == Difference("gas", 2)
    assert "a traced second run did not show" in command.comparison_lines(replace(compared, difference=found))[0] + (
        " ".join(command.comparison_lines(replace(compared, difference=found)))
    )
