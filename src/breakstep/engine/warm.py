"""Warming up: loading or compiling every kernel before the clock starts.

Kernels compile once on a machine and then come from the cache, but several cold processes would each
compile everything. So the driver warms itself up first, then each process that holds workers.
"""

from __future__ import annotations

import uuid
from dataclasses import replace

from breakstep.engine.program import Program
from breakstep.engine.run import RunOptions
from breakstep.engine.serial import SerialDispatch
from breakstep.errors import OverdueError
from breakstep.steps.rehearsal import without_waits

PROCESS = uuid.uuid4().hex  # of this process alone; ids of processes repeat between containers
SMALL = 4  # zones along each axis of the copy, unless a halo is wider


def small_copy(program: Program) -> Program:
    """The same physics on a mesh of a few zones, one tile, for as many cycles as there are orders."""
    problem = program.problem
    widest = max((width for _, read in problem.splitting.halo_reads() for width in read.halo), default=0)
    mesh = replace(problem.mesh, shape=tuple(min(n, max(SMALL, widest)) for n in problem.mesh.shape))
    splitting = without_waits(problem.splitting)
    small = replace(problem, mesh=mesh, splitting=splitting, cycles=len(splitting.orders), ended=None)
    return Program(small, mesh.shape, program.fuse)


def warm_up(program: Program, task_timeout: float = 0.0) -> str:
    """Run the small copy; returns the error that ended it, or "".

    Parameters
    ----------
    task_timeout : float
        Seconds that a kernel may take; 0 for no limit.

    An error is no reason to stop: the copy's state is not the problem's, and the real run will tell. Ctrl-C is:
    compiling takes a minute or two, and the run must not begin behind it.

    Raises
    ------
    KeyboardInterrupt
    OverdueError
    """
    result = SerialDispatch().run(small_copy(program), RunOptions(record=False, task_timeout=task_timeout))
    if isinstance(result.failure, OverdueError):
        raise result.failure
    if result.interrupted:
        raise KeyboardInterrupt
    return "" if result.failure is None else str(result.failure)


def process() -> str:
    """Which process this is: workers that share one share its kernels."""
    return PROCESS
