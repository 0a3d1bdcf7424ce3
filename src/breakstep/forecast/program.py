"""A program: phases over tiles with their costs, in a form that questions can change.

Where a lifted run says which recorded task waited for which, a program says why: a stage reads what an earlier
phase wrote along a pattern of tiles, uses a reduction with its lag, or goes on because of a verdict. So lags,
numbers of iterations and tiles can be changed and the graph comes out right. It knows no machine.
"""

from __future__ import annotations

import itertools
from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from breakstep.forecast.lift import Lifted
from breakstep.profile.frames import Integers

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Pattern:
    """Which tile reads which: pairs of tiles, sorted by consumer, then producer."""

    producer: Integers
    consumer: Integers

    @property
    def key(self) -> tuple[bytes, bytes]:
        """Something to compare patterns by."""
        return self.producer.tobytes(), self.consumer.tobytes()


@dataclass(frozen=True)
class Phase:
    """One stage in one cycle (and iteration), on all tiles.

    Attributes
    ----------
    reads : tuple of (int, int)
        Source phase and place in the program's patterns.
    makes : tuple of str
        Reductions that its tasks contribute to.
    cost : int
        Row in the program's cost tables.
    """

    stage: str
    cycle: int
    iteration: int
    skipped: bool
    reads: tuple[tuple[int, int], ...]
    makes: tuple[str, ...]
    cost: int


@dataclass(frozen=True)
class CostTables:
    """What tasks cost, shape (rows, tiles) each [ns].

    Attributes
    ----------
    kernel : dict of str to ndarray of float64
        By step.
    surface : ndarray of float64
        Ghost zones put together and rims cut.
    rest : ndarray of float64
        The dispatch's own share inside the task.
    output : ndarray of float64
        [bytes]
    """

    kernel: Mapping[str, Floats]
    surface: Floats
    rest: Floats
    output: Floats

    def duration(self, factors: Mapping[str, float], rest: float = 1.0) -> Floats:
        """Whole time of each task, kernels multiplied by step, shape (rows, tiles) [ns]."""
        total = self.surface + rest * self.rest
        for step, values in self.kernel.items():
            total = total + factors.get(step, 1.0) * values
        return total


@dataclass(frozen=True)
class Tiles:
    """Where the tiles lie.

    Attributes
    ----------
    origin, shape : ndarray of int64, shape (tiles, 3)
        [zones]
    periodic : tuple of bool
        Along each axis, whether the last tile's neighbour is the first.
    """

    origin: Integers
    shape: Integers
    periodic: tuple[bool, bool, bool] = (True, True, True)

    @property
    def zones(self) -> Integers:
        """Zones of each tile, shape (tiles,)."""
        return np.asarray(self.shape.prod(axis=1), dtype=np.int64)

    @property
    def places(self) -> Integers:
        """Position of each tile in the grid of tiles, shape (tiles, 3)."""
        columns = [np.unique(self.origin[:, axis], return_inverse=True)[1] for axis in range(3)]
        return np.stack(columns, axis=1).astype(np.int64)

    @property
    def grid(self) -> tuple[int, int, int]:
        """Tiles along each axis."""
        nx, ny, nz = (len(np.unique(self.origin[:, axis])) for axis in range(3))
        return nx, ny, nz


@dataclass(frozen=True)
class Program:
    """Phases, what they cost, and how reductions tie them.

    Attributes
    ----------
    uses : dict of str to tuple of str
        By stage, reductions made once a cycle that its tasks need.
    lags : dict of str to int
    verdicts : dict of str to str
        By reduction that ends a repeat, the stage that makes it.
    window : int
        Cycles that may be in flight at once.
    timed : tuple of str
        Steps that only waited when they were recorded: nothing slows them down.
    rim_bytes : dict of str to float
        By stage, bytes that cross each zone face of a tile's border for a neighbour [bytes].
    """

    phases: tuple[Phase, ...]
    patterns: tuple[Pattern, ...]
    costs: CostTables
    tiles: Tiles
    uses: Mapping[str, tuple[str, ...]]
    lags: Mapping[str, int]
    verdicts: Mapping[str, str]
    window: int
    rim_bytes: Mapping[str, float] = field(default_factory=dict)
    timed: tuple[str, ...] = ()

    @property
    def tile_count(self) -> int:
        """How many tiles."""
        return len(self.tiles.origin)

    @property
    def tasks(self) -> int:
        """Step tasks in all."""
        return len(self.phases) * self.tile_count

    @property
    def stages(self) -> tuple[str, ...]:
        """Names of stages in the order in which they first come."""
        return tuple(dict.fromkeys(phase.stage for phase in self.phases))

    @property
    def cycles(self) -> int:
        """Cycles that are run."""
        return len({phase.cycle for phase in self.phases if phase.cycle >= 0})

    @property
    def barrier_names(self) -> tuple[str, ...]:
        """Names by which barriers are switched: the parts of stages."""
        return tuple(dict.fromkeys(part for stage in self.stages for part in stage.split("+")))

    def with_lag(self, name: str, lag: int) -> Program:
        """The program with another lag; a repeat then takes as many iterations more or fewer."""
        changed = replace(self, lags={**self.lags, name: lag})
        more = lag - self.lags[name]
        return changed.with_iterations(name, more) if name in self.verdicts and more else changed

    def with_iterations(self, name: str, more: int) -> Program:
        """So many iterations more (or fewer) in each cycle's repeat that a verdict ends, at least one."""
        from breakstep.forecast.iterate import repeated

        return repeated(self, self.verdicts[name], more)


def program_of(lifted: Lifted, costs: CostTables, rim_bytes: Mapping[str, float] | None = None) -> Program:
    """The program that a recorded run executed.

    Parameters
    ----------
    costs : CostTables
        One row for each phase.
    """
    patterns, reads = _reads(lifted)
    names = lifted.phase_names()
    makes = _makes(lifted)
    phases = tuple(
        Phase(names[p], int(lifted.cycle[p]), int(lifted.iteration[p]), bool(lifted.skipped[p]), reads[p], makes[p], p)
        for p in range(lifted.phases)
    )
    tiles = _tiles(lifted)
    reductions = lifted.reductions
    return Program(
        phases, patterns, costs, tiles, _stage_uses(lifted, names), dict(reductions.lags),
        _verdict_stages(lifted, names), lifted.window, rim_bytes or {},
        lifted.timed,
    )  # fmt: skip


def _tiles(lifted: Lifted) -> Tiles:
    """Tiles of the mesh; edges are periodic unless the scenario says otherwise."""
    manifest = lifted.profile.manifest
    mesh = manifest["mesh"]["tiles"]
    edges = manifest["scenario"].get("resolved", {}).get("mesh", {}).get("edges", {})
    x, y, z = ("periodic" in edges.get(axis, ["periodic"]) for axis in "xyz")
    return Tiles(
        np.array([tile["origin"] for tile in mesh], dtype=np.int64),
        np.array([tile["shape"] for tile in mesh], dtype=np.int64),
        (x, y, z),
    )


def _reads(lifted: Lifted) -> tuple[tuple[Pattern, ...], list[tuple[tuple[int, int], ...]]]:
    """Edges of each phase as patterns, each pattern once."""
    tiles = lifted.tiles
    target, source = lifted.consumer // tiles, lifted.producer // tiles
    order = np.lexsort((lifted.producer, lifted.consumer, source, target))
    target, source = target[order], source[order]
    mine, theirs = lifted.consumer[order] % tiles, lifted.producer[order] % tiles
    cuts = np.flatnonzero(np.diff(target, prepend=-1) | np.diff(source, prepend=-1))
    patterns: dict[tuple[bytes, bytes], int] = {}
    found: list[Pattern] = []
    reads: list[list[tuple[int, int]]] = [[] for _ in range(lifted.phases)]
    ends = [*cuts.tolist(), len(target)]
    for low, high in itertools.pairwise(ends):
        pattern = Pattern(theirs[low:high], mine[low:high])
        if pattern.key not in patterns:
            patterns[pattern.key] = len(found)
            found.append(pattern)
        reads[int(target[low])].append((int(source[low]), patterns[pattern.key]))
    return tuple(found), [tuple(one) for one in reads]


def _makes(lifted: Lifted) -> list[tuple[str, ...]]:
    reductions = lifted.reductions
    found: list[list[str]] = [[] for _ in range(lifted.phases)]
    for name, phase in zip(reductions.name.tolist(), reductions.made_by.tolist(), strict=True):
        found[phase].append(reductions.names[name])
    return [tuple(one) for one in found]


def _stage_uses(lifted: Lifted, names: list[str]) -> dict[str, tuple[str, ...]]:
    """Stages that use results made once a cycle, as far as the record shows it."""
    reductions = lifted.reductions
    found: dict[str, dict[str, None]] = {}
    for instance, phase in zip(reductions.instance.tolist(), reductions.used_by.tolist(), strict=True):
        name = reductions.names[int(reductions.name[instance])]
        if not reductions.repeated[name]:
            found.setdefault(names[phase], {})[name] = None
    return {stage: tuple(used) for stage, used in found.items()}


def _verdict_stages(lifted: Lifted, names: list[str]) -> dict[str, str]:
    reductions = lifted.reductions
    makers = zip(reductions.name.tolist(), reductions.made_by.tolist(), strict=True)
    return {reductions.names[n]: names[phase] for n, phase in makers if reductions.repeated[reductions.names[n]]}
