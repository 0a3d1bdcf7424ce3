"""Problems that are all dispatch: tasks that do nothing, or keep a core busy for a chosen time.

Each task hands on what its left neighbour had before, so the state travels round a ring of tiles. The halo is
really needed, no arithmetic is, and what every tile must hold in the end is known to the bit.

Knows steps, meshes and kernels that spin. Refuses to know who runs them and how long it takes.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from breakstep.errors import BreakstepError
from breakstep.kernels.compiled import compiled
from breakstep.mesh.fields import Field
from breakstep.mesh.mesh import Edge, Mesh
from breakstep.mesh.tiling import Tile
from breakstep.steps.problem import Problem
from breakstep.steps.splitting import lie
from breakstep.steps.step import Array, Call, Read, Step

FIELD = "u"
STEP = "hand_on"
_START, _RATE = 0.3, 3.7  # the logistic map stays within 0 and 1, and no compiler knows where it goes
_TRIAL_TURNS = 200_000  # 8 ms in plain Python, 1 ms compiled: far above what a clock resolves
_TRIALS = 7


@compiled
def spin(turns: int) -> float:
    """Keep the core busy with the interpreter's lock released."""
    x = _START
    for _ in range(turns):
        x = _RATE * x * (1.0 - x)
    return x


def hold(turns: int) -> float:
    """Keep the core busy in plain Python, which holds the interpreter's lock."""
    x = _START
    for _ in range(turns):
        x = _RATE * x * (1.0 - x)
    return x


@dataclass(frozen=True)
class Pace:
    """Turns of the two loops in a millisecond of a free core."""

    released: float
    held: float

    @classmethod
    def measured(cls) -> Pace:
        """The fastest of some trials, by the thread's CPU time."""
        return cls(_turns_per_ms(spin), _turns_per_ms(hold))

    def busy(self, milliseconds: float, holds_lock: bool = False) -> HandOn:
        """The kernel that works for so long; always the same number of turns, whatever the core does."""
        pace = self.held if holds_lock else self.released
        return HandOn(max(1, round(pace * milliseconds)), holds_lock)


def _turns_per_ms(loop: Callable[[int], float]) -> float:
    loop(1)
    seconds = []
    for _ in range(_TRIALS):
        began = time.thread_time()
        loop(_TRIAL_TURNS)
        seconds.append(time.thread_time() - began)
    return 1e-3 * _TRIAL_TURNS / min(seconds)


@dataclass(frozen=True)
class HandOn:
    """Kernel: work for some turns of a loop, then hand the left neighbour's zones on."""

    turns: int = 0
    holds_lock: bool = False

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> dict[str, Array]:
        """New zones, shape (components, 1, 1, 1)."""
        if self.turns:
            (hold if self.holds_lock else spin)(self.turns)
        zones = arrays[FIELD][:, :-2]
        return {FIELD: zones[:, :, 1:-1] if call.active[1] else zones}


@dataclass(frozen=True)
class Numbered:
    """Initial state: in every component another number that tells the tile."""

    components: int

    def __call__(self, tile: Tile, mesh: Mesh) -> dict[str, Array]:
        """Zones of one tile, shape (components, 1, 1, 1)."""
        return {FIELD: self.of(tile.number)}

    def of(self, number: int) -> Array:
        """What the tile of this number begins with; sums that floating point holds exactly."""
        return (number + np.arange(self.components) / 4096.0).reshape(-1, 1, 1, 1)


@dataclass(frozen=True)
class Ring:
    """Tiles of one zone in a ring, or in a sheet with its edges joined: a halo graph.

    Attributes
    ----------
    grid : tuple of int
        Tiles along each axis: one for a ring, where a task reads its tile and two neighbours, two for a sheet,
        where it reads its tile and four.
    cycles : int
    components : int
        Numbers that a tile holds, and that a rim brings.
    stages : int
        Steps a cycle, all the same.
    kernel : HandOn
    """

    grid: tuple[int, ...]
    cycles: int
    components: int = 1
    stages: int = 1
    kernel: HandOn = HandOn()

    @property
    def tiles(self) -> int:
        """How many tiles there are."""
        return int(np.prod(self.grid))

    @property
    def tasks(self) -> int:
        """Step tasks of a run."""
        return self.tiles * self.cycles * self.stages

    def problem(self) -> Problem:
        """The problem as declared; one zone a tile, so cut it with :attr:`tile_shape`."""
        axes = len(self.grid)
        read = Read(FIELD, (1, 1 if axes > 1 else 0, 0))
        names = [STEP] if self.stages == 1 else [f"{STEP}_{i + 1}" for i in range(self.stages)]
        return Problem(
            name="hand_on",
            title="tasks that hand on what they read",
            mesh=Mesh(self.grid, (1.0,) * axes, ((Edge.PERIODIC, Edge.PERIODIC),) * axes),
            fields=(Field(FIELD, tuple(f"u{i}" for i in range(self.components))),),
            splitting=lie([Step(name, self.kernel, (read,), (FIELD,)) for name in names]),
            initial=Numbered(self.components),
            cycles=self.cycles,
        )

    @property
    def tile_shape(self) -> tuple[int, ...]:
        """Zones of a tile along each axis."""
        return (1,) * len(self.grid)

    def origin(self, tile: int) -> int:
        """The tile whose initial state a tile holds in the end: as many places to the left as there were steps."""
        row = self.tiles // self.grid[0]  # tiles are numbered with the last axis fastest
        return (tile - row * self.cycles * self.stages) % self.tiles

    def check(self, final: Sequence[Array]) -> None:
        """Compare the final state with what it must be.

        Raises
        ------
        BreakstepError
            A tile holds anything else.
        """
        state = Numbered(self.components)
        for tile, array in enumerate(final):
            if not np.array_equal(array, state.of(self.origin(tile))):
                raise BreakstepError(
                    f"tile {tile} should hold what tile {self.origin(tile)} began with, and does not; the dispatch"
                    " lost or mixed up data, so none of its figures count: run the tests of the engine"
                )
        if len(final) != self.tiles:
            raise BreakstepError(f"the run ended with {len(final)} tiles instead of {self.tiles}")
