"""What a worker notes of its phases and tasks, and the instructions it gives; no more behaviour than legal moves.

Everything here belongs to one state machine, and changes within its events only.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, TypeAlias

from breakstep.engine.resident.plan import Cut, Reach
from breakstep.graph.unroll import Making, Phase
from breakstep.steps.step import Array

WAITING, READY, RUNNING, DONE = "waiting", "ready", "running", "done"
MOVES = {WAITING: READY, READY: RUNNING, RUNNING: DONE}


@dataclass(frozen=True)
class SendRims:
    """Cut rims from a tile's arrays and send them: item ("rims", phase, tile, source) with the arrays."""

    worker: int
    phase: int
    tile: int
    source: int
    cuts: tuple[Cut, ...]
    arrays: Mapping[str, Array]


@dataclass(frozen=True)
class SendItem:
    """Send a small item: its key and, where it carries one, a vector."""

    worker: int
    key: tuple[Any, ...]
    vector: Array | None = None


@dataclass(frozen=True)
class Save:
    """Write the state of own tiles at the end of a cycle, then report that it has been saved."""

    cycle: int
    tiles: Mapping[int, Mapping[str, Array]]
    values: Mapping[str, Array]


@dataclass(frozen=True)
class Finish:
    """Work out a result from what all tiles gave, by functions of the user's, then report that it has been made.

    Attributes
    ----------
    phase : Phase
        Which made it.
    place : tuple of int
        The root: instance, level, index.
    making : Making
    combined, previous : ndarray or None
        What the tiles gave, and the last row of the result before.
    """

    phase: Phase
    place: tuple[int, int, int]
    making: Making
    combined: Array | None
    previous: Array | None


Instruction: TypeAlias = SendRims | SendItem | Save | Finish
Control: TypeAlias = Callable[[str, Phase, tuple[int, ...]], None]


class Waiter:
    """Something that goes on when nothing it waits for is missing any more."""

    __slots__ = ("missing",)

    def __init__(self, missing: int = 0) -> None:
        self.missing = missing


class TaskState(Waiter):
    """One own task that is not done.

    Attributes
    ----------
    priority : tuple of int
        Cycle, rank (negative), phase number: the smallest goes first.
    """

    __slots__ = ("priority", "state", "tile", "where")

    def __init__(self, where: PhaseState, tile: int, priority: tuple[int, int, int]) -> None:
        self.missing = 0
        self.where = where
        self.tile = tile
        self.state = WAITING
        self.priority = priority

    @property
    def phase(self) -> Phase:
        """The phase it belongs to."""
        phase = self.where.phase
        assert phase is not None
        return phase

    def move(self, to: str) -> None:
        """The only place where a task's state changes."""
        if MOVES.get(self.state) != to:
            raise AssertionError(f"{self}: from {self.state} to {to} is no legal move")
        self.state = to

    def __str__(self) -> str:
        phase = self.phase
        return f"task {phase.number} ({phase.stage.name}, cycle {phase.cycle}, tile {self.tile})"


class PhaseState:
    """One phase on this worker: its tasks, the arrays they made, and who reads them.

    Attributes
    ----------
    live : bool
        Whether it holds the newest version of a field that a phase to come, or the end of the run, may need.
    held : dict of int to mapping of str to ndarray
        By tile, the arrays of tasks that are done.
    reads : list of (PhaseState, Reach)
        What its tasks read; empty when all are done.
    readers : dict of int to int
        By tile, tasks that are not done and checkpoints that are not saved which read its arrays.
    waiting : dict of int to list of Waiter
        By tile, who misses its arrays.
    owed : dict of int to list of (worker, reading phase, cuts)
        By tile, rims to send when its task is done.
    tasks : dict of int to TaskState
        By tile, tasks that are not done.
    ready : list
        Its share of the ready tasks, kept under a limit on live bytes only.
    """

    __slots__ = ("held", "live", "number", "owed", "phase", "readers", "reads", "ready", "tasks", "waiting")

    def __init__(self, number: int, phase: Phase | None) -> None:
        self.number = number
        self.phase = phase
        self.live = True
        self.held: dict[int, Mapping[str, Array]] = {}
        self.reads: list[tuple[PhaseState, Reach]] = []
        self.readers: dict[int, int] = {}
        self.waiting: dict[int, list[Waiter]] = {}
        self.owed: dict[int, list[tuple[int, int, tuple[Cut, ...]]]] = {}
        self.tasks: dict[int, TaskState] = {}
        self.ready: list[tuple[tuple[int, int, int], int, TaskState]] = []

    def read(self, tiles: Sequence[int], waiter: Waiter) -> None:
        """Somebody reads some tiles' arrays, and waits for those that are not there yet."""
        readers, held = self.readers, self.held
        for tile in tiles:
            readers[tile] = readers.get(tile, 0) + 1
            if tile not in held:
                waiter.missing += 1
                self.waiting.setdefault(tile, []).append(waiter)


@dataclass(slots=True)
class Bundle:
    """Rims that came from one tile of another worker for one phase."""

    arrays: Mapping[Any, Array]
    nbytes: int
    readers: int


@dataclass(frozen=True)
class Exits:
    """Where a collaborator of the state machine turns to.

    Attributes
    ----------
    satisfy : callable
        A waiter misses one thing fewer.
    out : list of Instruction
        Instructions of the event under way.
    control : callable
        A node, a counter or a release has done its work: kind, phase, place.
    """

    satisfy: Callable[[Waiter], None]
    out: list[Instruction]
    control: Control
