"""Ranks against longest paths worked out by hand; the order in which ready tasks are taken."""

from __future__ import annotations

from collections.abc import Sequence

from breakstep.engine.program import Program
from breakstep.engine.resident.plan import WorkerPlan
from breakstep.engine.resident.ranks import Ranks
from breakstep.engine.run import RunOptions, unroller_for
from breakstep.graph.unroll import Making, Phase, ValueRef
from breakstep.steps.splitting import Splitting
from breakstep.steps.step import Read
from tests.mixtures import mixing, mixture, repeated
from tests.unit.engine.resident.hands import HALO, finish, line, machine, take

ONE, TWO = (mixing(name, [HALO], ["a"]) for name in ("one", "two"))
AFTER = mixing("after", [Read("a")], ["b"])
ASIDE = mixing("aside", [Read("c")], ["c"])


def phases_of(program: Program) -> list[Phase]:
    """All phases of a run without values."""
    return [phase for phase in unroller_for(program, RunOptions()).run() if isinstance(phase, Phase)]


COSTS = {"one": (10, 20, 30, 40), "aside": (1000, 0, 0, 0), "two": (1, 2, 3, 4), "after": (5, 0, 0, 100)}


def ranked(owners: Sequence[int], worker: int = 0) -> dict[str, dict[int, int]]:
    """Ranks by step after a cycle in which the tasks of each step cost so much on each tile."""
    program = line([ONE, ASIDE, TWO, AFTER], cycles=1)
    phases = phases_of(program)
    ranks = Ranks(WorkerPlan(program, owners, worker))
    for phase in phases:
        ranks.emit(phase)
    for phase in reversed(phases):  # in whatever order they are finished
        for tile, cost in enumerate(COSTS[phase.stage.name]):
            if owners[tile] == worker:
                ranks.note(phase, tile, cost)
    assert all(ranks.of_phase(phase) == {} for phase in phases)
    ranks.close(before=1)
    return {phase.stage.name: dict(ranks.of_phase(phase)) for phase in phases}


def test_the_longest_path_by_hand() -> None:
    """``after`` follows ``two`` on its own tile, ``two`` follows ``one`` on three; ``aside`` is followed by nothing."""
    ranks = ranked([0, 0, 0, 0])
    assert ranks["after"] == {0: 5, 1: 0, 2: 0, 3: 100}
    assert ranks["two"] == {0: 1 + 5, 1: 2, 2: 3, 3: 4 + 100}
    assert ranks["one"] == {0: 10 + 6, 1: 20 + 6, 2: 30 + 104, 3: 40 + 104}
    assert ranks["aside"] == {0: 1000, 1: 0, 2: 0, 3: 0}


def test_paths_run_through_own_tiles() -> None:
    ranks = ranked([0, 0, 0, 1])
    assert ranks["one"] == {0: 10 + 6, 1: 20 + 6, 2: 30 + 3}
    ranks = ranked([0, 0, 0, 1], worker=1)
    assert ranks["one"] == {3: 144}


def test_an_iteration_waits_for_all_tiles_through_its_verdict() -> None:
    program = line([repeated("p", [ONE], "a")], cycles=1, fuse=True)
    (stage,) = program.template.stages
    (verdict,) = program.problem.splitting.all_reductions()
    first = Phase(1, stage, 0, 0, {"a": 0}, makes=(Making(verdict, 0, None),))
    second = Phase(2, stage, 0, 1, {"a": 1}, gate=ValueRef(0))
    ranks = Ranks(WorkerPlan(program, [0, 0, 0, 0], 0))
    for phase, costs in ((first, (1, 1, 1, 1)), (second, (0, 0, 0, 50))):
        ranks.emit(phase)
        for tile, cost in enumerate(costs):
            ranks.note(phase, tile, cost)
    ranks.close(before=1)
    assert ranks.of_phase(second) == {0: 0, 1: 0, 2: 0, 3: 50}
    assert ranks.of_phase(first) == dict.fromkeys(range(4), 51)
    third = Phase(3, stage, 1, 7, {"a": 2})
    assert ranks.of_phase(third) == ranks.of_phase(second), "an iteration that there was not is like the last"


def test_each_order_has_ranks_of_its_own() -> None:
    splitting = Splitting(((ONE, TWO), (TWO, ONE)))
    program = Program(mixture(splitting, (8,), line().problem.mesh.edges[0][:1], 3), (2,), fuse=False)
    ranks = Ranks(WorkerPlan(program, [0, 0, 0, 0], 0))
    for phase in phases_of(program):
        if phase.cycle < 2:
            ranks.emit(phase)
            for tile in range(4):
                ranks.note(phase, tile, 1 + phase.cycle)
    ranks.close(before=2)
    found = [max(ranks.of_phase(phase).values()) for phase in phases_of(program)]
    assert found == [2, 1, 4, 2, 2, 1]


def test_measured_costs_decide_who_goes_first_in_the_next_cycle() -> None:
    core = machine(line([ASIDE], cycles=2), window=1)
    core.start()
    for cost in (3, 9, 1, 5):
        task = take(core)
        core.measured(task, cost)
        finish(core, task)
    assert [take(core).tile for _ in range(4)] == [1, 3, 0, 2]


def test_without_costs_tasks_go_by_phase_and_tile_and_earlier_cycles_first() -> None:
    core = machine(line([ASIDE, mixing("other", [Read("a")], ["a"])], cycles=2))
    core.start()
    assert [(t.phase.cycle, t.phase.stage.name, t.tile) for t in (take(core) for _ in range(8))] == [
        (0, name, tile) for name in ("aside", "other") for tile in range(4)
    ]
