"""A pilot: a few cycles of the real problem, to measure what each tile costs before placing tiles for good."""

from __future__ import annotations

from dataclasses import replace

from breakstep.engine.program import Program
from breakstep.engine.run import Dispatch, RunOptions

PILOT_CYCLES = 3  # the first cycle is not like the others: initial states are rough


def measure_costs(dispatch: Dispatch, program: Program, options: RunOptions) -> tuple[float, ...]:
    """Processor time in kernels for each tile [s], over the cycles of a pilot but its first.

    Raises
    ------
    BreakstepError
        The pilot failed as the run itself would.
    """
    problem = program.problem
    short = replace(problem, cycles=min(PILOT_CYCLES, problem.cycles))
    pilot = Program(short, program.tile_shape, program.fuse)
    trial = replace(options, placement="curve", costs=None, barriers=(), checkpoint_every=0, trace=False, record=True)
    result = dispatch.run(pilot, trial)
    if result.failure is not None:
        raise result.failure
    if result.interrupted:
        raise KeyboardInterrupt
    tasks = result.record.tasks.table().select(["task", "tile", "cycle"]).to_pandas()
    spent = result.record.intervals.table().select(["task", "what", "cpu_ns"]).to_pandas()
    kernels = spent[spent["what"] == "kernel"].merge(tasks, on="task")
    later = kernels[kernels["cycle"] > 0] if short.cycles > 1 else kernels
    costs = later.groupby("tile")["cpu_ns"].sum()
    return tuple(float(costs.get(tile, 0)) * 1e-9 for tile in range(len(program.tiling)))
