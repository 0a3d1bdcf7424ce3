"""What a run is asked for and what it gives back, whichever dispatch carries it out."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from typing import Protocol

import numpy as np

from breakstep.engine.program import Program
from breakstep.graph.unroll import Unroller
from breakstep.profile.record import RunRecord
from breakstep.steps.step import Array


@dataclass(frozen=True)
class RunOptions:
    """How to run a program.

    Attributes
    ----------
    barriers : tuple of str
        Names of the barriers that are on.
    placement : str
        Who owns which tile; see :func:`breakstep.engine.placement.owners`.
    costs : tuple of float or None
        Measured cost of each tile, for the placement ``"balanced"``.
    window : int
        Cycles that may be in flight at once.
    record : bool
        Whether to keep a record of tasks (results are the same without).
    memory_limit : int
        Live bytes a worker above which run-ahead is held back; 0 for no limit. Resident dispatch only.
    checkpoint_every : int
        Cycles between checkpoints; 0 for none. Resident dispatch only.
    task_timeout : float
        Seconds after which a kernel that has not returned ends the run; 0 for no limit.
    trace : bool
        Whether to record a checksum of every array that a task makes; slow, for finding differences.
    start : int
        First cycle; above 0 when a run goes on from a checkpoint.
    stop : int or None
        Cycle before which to stop; None for the problem's own end.
    """

    barriers: tuple[str, ...] = ()
    placement: str = "blocks"
    costs: tuple[float, ...] | None = None
    window: int = 4
    record: bool = True
    memory_limit: int = 0
    checkpoint_every: int = 0
    task_timeout: float = 0.0
    trace: bool = False
    start: int = 0
    stop: int | None = None

    def starting_at(self, cycle: int) -> RunOptions:
        """The same, for a run that goes on with this cycle."""
        return replace(self, start=cycle)


@dataclass
class RunResult:
    """What a run leaves.

    Attributes
    ----------
    fields : dict of str to list of ndarray
        Final arrays of each field, by tile.
    values : dict of str to ndarray
        Last result of each cycle-level reduction.
    record : RunRecord
    seconds : float
        Wall time as the driver saw it: the initial state and the gathering of the final one included.
    cycles : int
        Cycles that were completed.
    interrupted : bool
        Whether the user stopped the run; there are no fields and values then, nor after a failure.
    failure : Exception or None
        The error that ended the run early.
    """

    fields: dict[str, list[Array]]
    values: dict[str, Array]
    record: RunRecord
    seconds: float
    cycles: int
    interrupted: bool = False
    failure: Exception | None = None
    notes: dict[str, object] = field(default_factory=dict)


Progress = Callable[[int], None]


class Dispatch(Protocol):
    """Carries out the tasks of a program."""

    name: str
    workers: int
    threads: int

    def run(self, program: Program, options: RunOptions, progress: Progress | None = None) -> RunResult:
        """Run to the end, to an error or to an interrupt, and say which."""
        ...


def unroller_for(program: Program, options: RunOptions) -> Unroller:
    """The unrolling of a program under the options' barriers, from ``start`` to ``stop``."""
    problem = program.problem
    cycles = problem.cycles if options.stop is None else min(options.stop, problem.cycles)
    return Unroller(program.template, cycles, options.barriers, problem.ended, options.start)


def whole_field(program: Program, tiles: list[Array]) -> Array:
    """One array over the mesh from the arrays of its tiles, shape (components, nx, ny, nz)."""
    whole = np.empty((tiles[0].shape[0], *program.problem.mesh.zones))
    for tile, array in zip(program.tiling.tiles, tiles, strict=True):
        whole[(slice(None), *tile.slices())] = array
    return whole
