"""Scenarios with steps by timer: what may be left out, and what is refused."""

from __future__ import annotations

import copy
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from breakstep.errors import ScenarioError
from breakstep.mesh.mesh import Edge, Mesh
from breakstep.scenario.load import load_scenario, scenario_from
from breakstep.scenario.rehearsed import rank_of_tile
from breakstep.steps.splitting import Repeat
from breakstep.steps.timed import timed_kernel
from tests.records import STEPS, saved, table, tables
from tests.unit.scenario import example


@pytest.fixture
def alone(tmp_path: Path) -> dict[str, Any]:
    frame = table(6, 3, STEPS).assign(bytes=640)
    return tables(saved(frame, tmp_path / "r.csv"), (3, 2), 3)


def refused(made: dict[str, Any], *overrides: str) -> list[str]:
    with pytest.raises(ScenarioError) as error:
        scenario_from(made, source="s", overrides=overrides)
    return list(error.value.details["faults"])


def test_a_scenario_by_timers_alone_needs_no_gas(alone: dict[str, Any]) -> None:
    scenario = scenario_from(alone, source="s")
    problem = scenario.problem()
    assert problem.mesh.zones == (3, 2, 1)
    assert scenario.tile == (1, 1)
    assert [step.name for step in problem.splitting.steps()] == list(STEPS)
    assert all(timed_kernel(step) for step in problem.splitting.steps())
    assert [reduction.lag for reduction in problem.splitting.reductions] == [1]
    assert problem.by_name()["sent_sweep"].size == 640 // 4 // 8  # four faces, eight bytes a number
    again = scenario_from(scenario.resolved(), source="again")
    assert again.resolved() == scenario.resolved()


def test_no_reduction_where_the_code_has_none(alone: dict[str, Any]) -> None:
    problem = scenario_from(alone, source="s", overrides=["timers.reduction=false"]).problem()
    assert problem.splitting.reductions == ()
    assert not any(step.uses for step in problem.splitting.steps())


@pytest.mark.parametrize(
    ("override", "sentence"),
    [
        ("run.cycles=4", "run.cycles: expected at most the 3 cycles that are recorded"),
        ("timers.steps.1.name=brn", "step: expected sweep, brn or solve, came burn in line 8"),
        ("timers.steps.1.name=solve", "timers.steps.2.name: solve is listed twice"),
        ("timers.steps.0.halo=2", "timers.steps.0.halo: a rank is one zone here, so expected 0 or 1, came 2"),
        ("timers.steps.1.corners=true", "timers.steps.1.halo: expected at least 1"),
        ('timers.steps.0.axes=["z"]', "timers.steps.0.axes: the mesh has no axis z"),
        ("timers.steps.0.after=hydro", "timers.steps.0.after: there is no [hydro]"),
        ("timers.ranks=[2, 2]", "rank: expected 0 to 3, one for each tile of the mesh"),
        ("mesh.tile=[3, 2]", "mesh.tile: a scenario by timers alone has one zone a rank"),
        ("run.splitting=strang", "run.splitting: steps by timer alone run in the order given"),
        ("run.end_time=1.0", "run.end_time: steps by timer have no time of their own"),
        ("timers.dilate=0", "timers.dilate: expected a number above 0"),
        ("timers.file=nowhere.csv", "timers.file: nowhere.csv cannot be read"),
    ],
)
def test_faults_of_the_table(alone: dict[str, Any], override: str, sentence: str) -> None:
    assert any(sentence in fault for fault in refused(alone, override))


def test_faults_of_table_and_records_are_said_together(alone: dict[str, Any]) -> None:
    found = refused(alone, "timers.steps.1.corners=true", "run.cycles=9", "mesh.tile=[3, 2]")
    assert len(found) >= 3


def test_bytes_must_come_from_somewhere(tmp_path: Path) -> None:
    made = tables(saved(table(6, 3, STEPS), tmp_path / "r.csv"), (3, 2), 3)
    assert "timers.steps.0.face_bytes: is missing" in refused(made)[0]


def test_more_bytes_than_a_rehearsal_moves(tmp_path: Path) -> None:
    """Of 8e6 bytes an exchange along two axes, a neighbour gets 2e6."""
    frame = table(6, 3, STEPS).assign(bytes=8e6)
    made = tables(saved(frame, tmp_path / "r.csv"), (3, 2), 3)
    found = refused(made)
    assert "timers.steps.0.face_bytes: the records have 2e+06 bytes sent to one neighbour" in found[0]
    made["timers"]["steps"][0]["face_bytes"] = made["timers"]["steps"][2]["face_bytes"] = 1e6
    scenario_from(made, source="s")


def test_records_lie_beside_the_scenario(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    saved(table(2, 1), tmp_path / "r.csv")
    text = 'name = "s"\n[run]\ncycles = 1\n[timers]\nfile = "r.csv"\nranks = [2]\n[[timers.steps]]\nname = "burn"\n'
    (tmp_path / "s.toml").write_text(text)
    monkeypatch.chdir("/")
    resolved = load_scenario(tmp_path / "s.toml").resolved()
    assert resolved["timers"]["file"] == str(tmp_path / "r.csv")


def test_ranks_may_be_numbered_the_other_way() -> None:
    mesh = Mesh((2, 3), (1.0, 1.0), ((Edge.PERIODIC,) * 2,) * 2)
    assert rank_of_tile(mesh, (1, 1), "last_axis_fastest") == [0, 1, 2, 3, 4, 5]
    # tile (i, j) has number 3 i + j, and its rank is i + 2 j
    assert rank_of_tile(mesh, (1, 1), "first_axis_fastest") == [i + 2 * j for i in range(2) for j in range(3)]


def mixed(tmp_path: Path, **steps: Any) -> dict[str, Any]:
    frame = table(4, 1, ("gravity", "cool"))
    listed = [{"name": "gravity", "halo": 1, "after": "hydro"}, {"name": "cool", **steps}]
    made = copy.deepcopy(example.tables())
    made["timers"] = {"file": str(saved(frame, tmp_path / "m.csv")), "steps": listed}
    return made


@pytest.mark.parametrize("splitting", ["lie", "alternating", "strang"])
def test_steps_by_timer_stand_among_real_ones(tmp_path: Path, splitting: str) -> None:
    scenario = scenario_from(mixed(tmp_path), source="s", overrides=[f"run.splitting={splitting}"])
    first = [item.name for item in scenario.problem().splitting.orders[0]]
    assert first[:5] == ["sweep_x", "sweep_y", "gravity", "burn", "cool"]
    assert sum(isinstance(item, Repeat) for item in scenario.problem().splitting.orders[0]) == 1
    behind = scenario_from(mixed(tmp_path, after="transport"), source="s").problem().splitting.orders[0]
    assert [item.name for item in behind][-2:] == ["exchange", "cool"]


def test_faults_among_real_steps(tmp_path: Path) -> None:
    made = mixed(tmp_path, face_bytes=64.0, halo=5)
    made["timers"]["ranks"] = [2, 2]
    found = "\n".join(refused(made))
    assert "face_bytes: among real steps the ghost zones of the gas are sent" in found
    assert "halo: expected at most 4, the narrowest tile, came 5" in found
    assert "timers.ranks: among real steps the tiles of the mesh are the ranks" in found
    taken = mixed(tmp_path)
    taken["timers"]["steps"][1]["name"] = "burn"
    assert any("burn is the name of something built in" in fault for fault in refused(taken))


def test_the_gas_passes_a_step_by_timer_unchanged(tmp_path: Path) -> None:
    step = next(s for s in scenario_from(mixed(tmp_path), source="s").problem().splitting.steps() if s.name == "cool")
    kernel = timed_kernel(step)
    assert kernel is not None
    gas = np.arange(24.0).reshape(2, 3, 4, 1)
    call: Any = type("Call", (), {"shape": (3, 4, 1)})()
    made = kernel.make({"gas": gas}, call)["gas"]
    assert np.array_equal(made, gas)
    assert not np.shares_memory(made, gas)
