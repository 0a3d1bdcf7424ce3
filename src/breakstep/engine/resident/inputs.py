"""From the state machine's task to what :func:`breakstep.engine.execute.execute` takes, and from a task's arrays
to the rims that other workers need."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from breakstep.engine.execute import Inputs, Site
from breakstep.engine.program import Program
from breakstep.engine.resident.core import Core
from breakstep.engine.resident.states import Finish, SendRims, TaskState
from breakstep.mesh.halo import cut
from breakstep.mesh.mesh import Triple
from breakstep.steps.step import Array


def site_of(task: TaskState) -> Site:
    """Which step task it is."""
    phase = task.phase
    return Site(phase.stage.index, task.tile, phase.cycle, phase.iteration)


def inputs_of(core: Core, task: TaskState) -> Inputs:
    """Everything a running task reads; safe without the core's lock, for nothing it reads can be dropped."""
    phase, tile, program = task.phase, task.tile, core.program
    rims: dict[str, dict[Triple, Array]] = {}
    for read in phase.stage.reads:
        if read.is_local:
            continue
        of_field = rims.setdefault(read.field, {})
        for rim in program.plans.plan(tile, read).rims:
            if core.plan.owners[rim.neighbour] == core.me:
                of_field[rim.offset] = cut(rim, core.neighbour(task, read.field, rim.neighbour))
            else:
                of_field[rim.offset] = core.bundle(task, read.field, rim.neighbour)[read.field, tile, rim.offset]
    passes = False
    if phase.gate is not None:
        passes = program.stop(phase.stage.index, core.values[phase.gate.instance][phase.gate.row])
    return Inputs(
        own=core.own_arrays(task),
        rims=rims,
        values={name: core.values[ref.instance][ref.row] for name, ref in phase.values.items()},
        passes=passes,
    )


def worked_out(program: Program, order: Finish) -> Array:
    """The result that a root's order asks for.

    Raises
    ------
    BreakstepError
        A user's function raised, or says so itself.
    """
    making = order.making
    return program.finish(order.phase.stage.index, making.reduction, order.combined, order.previous, making.rows)


def cut_rims(order: SendRims, arrays: Mapping[str, Array]) -> dict[Any, Array]:
    """The arrays of a rims item: copies always, for a contiguous view would keep the whole tile alive."""
    return {(name, tile, rim.offset): np.array(cut(rim, arrays[name]), order="C") for name, tile, rim in order.cuts}
