"""Warming up: loading or compiling every kernel before the clock starts.

Kernels compile once on a machine and then come from the cache, but several cold processes would each
compile everything. So the driver warms itself up first, then each process that holds workers; what a user brings
may crash, and is first called in a worker.
"""

from __future__ import annotations

import uuid
from dataclasses import replace

from breakstep.engine.program import Program
from breakstep.engine.run import RunOptions
from breakstep.engine.serial import SerialDispatch
from breakstep.errors import ClusterError, OverdueError
from breakstep.steps.foreign import InPlace
from breakstep.steps.rehearsal import without_waits
from breakstep.steps.splitting import Item, Repeat

PROCESS = uuid.uuid4().hex  # of this process alone; ids of processes repeat between containers
SMALL = 4  # zones along each axis of the copy, unless a halo is wider


def is_ours(program: Program) -> bool:
    """Whether all kernels are this package's own: they work on tiles of any shape, and do not end their process."""
    splitting = program.problem.splitting
    kernels = [step.kernel for step in splitting.steps()] + [r.kernel for r in splitting.all_reductions()]
    return all(_home(kernel).startswith("breakstep.") and not isinstance(kernel, InPlace) for kernel in kernels)


def _home(kernel: object) -> str:
    return str(getattr(kernel, "__module__", None) or type(kernel).__module__)


def small_copy(program: Program) -> Program:
    """The same physics on a mesh of one tile, for as many cycles as there are orders.

    The tile has a few zones. Where kernels are the user's it has the shape of the problem's tiles: an old routine may
    know its dimensions since it was compiled, and would write past a smaller block; repeats then stop at once.
    """
    problem = program.problem
    widest = max((width for _, read in problem.splitting.halo_reads() for width in read.halo), default=0)
    shape, splitting = tuple(min(n, max(SMALL, widest)) for n in problem.mesh.shape), without_waits(problem.splitting)
    if not is_ours(program):
        shape = program.tiling.tile_shape
        splitting = replace(splitting, orders=tuple(tuple(map(_stopping, order)) for order in splitting.orders))
    mesh = replace(problem.mesh, shape=shape)
    small = replace(problem, mesh=mesh, splitting=splitting, cycles=len(splitting.orders), ended=None)
    return Program(small, mesh.shape, program.fuse)


def _stopping(item: Item) -> Item:
    return replace(item, stop=at_once) if isinstance(item, Repeat) else item


def at_once(verdict: object) -> bool:
    """A verdict that ends a repeat, whatever the residual."""
    return True


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


def lost_in_warm_up(error: OSError) -> ClusterError:
    """The error for a worker that has gone while it loaded the problem and called each kernel for the first time."""
    return ClusterError(
        f"a worker was lost before the run began, while it called each kernel for the first time ({error!r}); a"
        " compiled routine that crashes takes its process along, and breakstep audit says which",
        lost=True,
    )


def process() -> str:
    """Which process this is: workers that share one share its kernels."""
    return PROCESS
