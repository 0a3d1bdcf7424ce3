"""State machines driven by hand: programs on a line of tiles, and what the tests of this folder do again and again."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from breakstep.engine.execute import execute
from breakstep.engine.program import Program
from breakstep.engine.resident.core import Core, CoreOptions, Finish, Instruction, TaskState
from breakstep.engine.resident.inputs import inputs_of, site_of, worked_out
from breakstep.engine.resident.plan import WorkerPlan
from breakstep.engine.run import RunOptions, unroller_for
from breakstep.graph.unroll import Phase
from breakstep.mesh.mesh import Edge
from breakstep.steps.reduction import Reduction
from breakstep.steps.splitting import Item, Splitting
from breakstep.steps.step import Array, Read
from tests.mixtures import measured, mixing, mixture

HALO = Read("a", (1, 0, 0))
SMOOTH = mixing("smooth", [HALO], ["a"])
LOCAL = mixing("local", [Read("a")], ["b"])
DT = measured("dt", "a", lag=1)
STEERED = mixing("steered", [HALO], ["a"], ["dt"])


def line(
    items: Sequence[Item] = (SMOOTH,),
    tiles: int = 4,
    cycles: int = 3,
    reductions: Sequence[Reduction] = (),
    edge: Edge = Edge.OUTFLOW,
    fuse: bool = False,
) -> Program:
    """A program on tiles of two zones in a row."""
    splitting = Splitting((tuple(items),), tuple(reductions))
    return Program(mixture(splitting, (2 * tiles,), (edge,), cycles), (2,), fuse)


def machine(
    program: Program,
    owners: Sequence[int] | None = None,
    worker: int = 0,
    barriers: Sequence[str] = (),
    control: Any = None,
    **options: int,
) -> Core:
    """The state machine of one worker; without owners it is alone."""
    owners = [0] * len(program.tiling) if owners is None else owners
    plan = WorkerPlan(program, owners, worker)
    unroller = unroller_for(program, RunOptions(barriers=tuple(barriers)))
    initial = {tile: program.initial(tile) for tile in plan.tiles}
    extra = () if control is None else ((), control)
    return Core(plan, unroller, 1 + max(*owners, worker), CoreOptions(**options), initial, *extra)


def finish(core: Core, task: TaskState) -> list[Instruction]:
    """Run a task that was taken; returns all instructions that are left to others."""
    output = execute(core.program, site_of(task), inputs_of(core, task))
    return obeyed(core, core.finish(task, output.fields, output.partials))


def take(core: Core) -> TaskState:
    """A task that must be there."""
    task = core.take()
    assert task is not None
    return task


def obeyed(core: Core, instructions: list[Instruction]) -> list[Instruction]:
    """Work out results as soon as that is asked for; returns the other instructions, those that follow among them."""
    left: list[Instruction] = []
    for order in instructions:
        if isinstance(order, Finish):
            left += obeyed(core, core.made(order, worked_out(core.program, order)))
        else:
            left.append(order)
    return left


def go_on(core: Core) -> list[Instruction]:
    """Run whatever can be run; returns all such instructions."""
    made: list[Instruction] = []
    while (task := core.take()) is not None:
        made += finish(core, task)
    return made


def ended(core: Core) -> Core:
    """Run a lonely worker to its end."""
    core.start()
    go_on(core)
    assert core.finished
    return core


def arrays(value: float, zones: int = 2) -> dict[str, Array]:
    """Arrays of one field."""
    return {"a": np.full((1, zones, 1, 1), value)}


def phase_like(program: Program, stage: int = 0, number: int = 1, cycle: int = 0, **facts: Any) -> Phase:
    """A phase of a program that no unrolling has emitted; it reads the initial state."""
    found = program.template.stages[stage]
    sources: Mapping[str, int] = facts.pop("sources", {read.field: 0 for read in found.reads})
    return Phase(number, found, cycle, sources=dict(sources), **facts)
