"""Tiles x cycles of a splitting as a rule instead of a stored graph.

A phase is one stage in one cycle; a tile's task in a phase needs its own task of the phase before, and that of
some neighbours. A gate behind a phase holds later tasks until all tiles are through it: a barrier,
or a reduction whose value is used later. Costs come from :mod:`breakstep.forecast.laws`.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from math import prod

import numpy as np

from breakstep.errors import ForecastError
from breakstep.forecast.graph import Int32s, Int64s
from breakstep.forecast.laws import Cost

Offset = tuple[int, int, int]


def along(*axes: int) -> tuple[Offset, ...]:
    """Both neighbours along each of some axes."""
    steps = [tuple(sign * (axis == other) for other in range(3)) for axis in axes for sign in (-1, 1)]
    return tuple((a, b, c) for a, b, c in steps)


def around(dimensions: int) -> tuple[Offset, ...]:
    """All neighbours, those at edges and corners too."""
    ranges = [(-1, 0, 1) if axis < dimensions else (0,) for axis in range(3)]
    return tuple((a, b, c) for a, b, c in itertools.product(*ranges) if (a, b, c) != (0, 0, 0))


@dataclass(frozen=True)
class Gate:
    """All tiles must be through ``stage``, as many cycles ``back``, before a task may start."""

    stage: int
    back: int


@dataclass(frozen=True)
class TileStage:
    """One stage.

    Parameters
    ----------
    cost : Cost
    offsets : tuple of offsets
        The neighbours whose task of the phase before is needed.
    halo_bytes : int
        What comes from each neighbour on another worker [bytes].
    gates : tuple of Gate
        What is waited for beside data.
    slack : int
        Neighbours' tasks are needed of that many phases before; 1 is the phase before. For the sweep alone.
    """

    cost: Cost
    offsets: tuple[Offset, ...] = ()
    halo_bytes: int = 0
    gates: tuple[Gate, ...] = ()
    slack: int = 1


@dataclass(frozen=True)
class TiledSplitting:
    """Stages on a box of tiles, cycle after cycle.

    Parameters
    ----------
    shape : tuple of int
        Tiles along each axis, one to three axes.
    cycles : int
    stages : tuple of TileStage
    periodic : bool
        Whether the box closes on itself; otherwise tiles at its faces have fewer neighbours.
    seed : int
        Of the random factors.
    """

    shape: tuple[int, ...]
    cycles: int
    stages: tuple[TileStage, ...]
    periodic: bool = True
    seed: int = 1
    box: tuple[int, int, int] = field(init=False, repr=False)

    def __post_init__(self) -> None:
        sides = self._inner(self.shape, 1)
        object.__setattr__(self, "box", sides)
        faults = self._faults()
        if faults:
            raise ForecastError("Tiles cannot be played: " + "; ".join(faults) + ".", faults=faults)

    def _inner(self, values: tuple[int, ...], fill: int) -> tuple[int, int, int]:
        """Values along the axes there are as values along three axes, the last of which is a long one."""
        used = values[: len(self.shape)]
        three = (*(fill for _ in range(3 - len(used))), *used)
        return three[0], three[1], three[2]

    def inner_offsets(self, stage: TileStage) -> list[Offset]:
        """The stage's offsets in the box; along an axis of one tile nobody is a neighbour."""
        found = [self._inner(offset, 0) for offset in stage.offsets]
        return [one for one in found if all(side > 1 or not step for step, side in zip(one, self.box, strict=True))]

    def _faults(self) -> list[str]:
        faults = []
        if not 1 <= len(self.shape) <= 3 or min(self.shape) < 1 or self.cycles < 0 or not self.stages:
            faults.append(
                f"shape {self.shape}, {self.cycles} cycles and {len(self.stages)} stages were given; expected one"
                " to three axes of at least a tile, no negative number of cycles, and a stage"
            )
        for number, stage in enumerate(self.stages):
            if len(stage.cost.cell) != self.tiles:
                faults.append(f"stage {number} has costs for {len(stage.cost.cell)} tiles; expected {self.tiles}")
            for gate in stage.gates:
                if not 0 <= gate.stage < len(self.stages) or gate.back * len(self.stages) <= gate.stage - number:
                    faults.append(f"stage {number} waits for {gate}, which does not come before it")
        return faults

    @property
    def tiles(self) -> int:
        """Number of tiles."""
        return prod(self.shape)

    @property
    def phases(self) -> int:
        """Number of phases."""
        return self.cycles * len(self.stages)

    @property
    def tasks(self) -> int:
        """Number of tasks."""
        return self.tiles * self.phases

    def lockstep(self) -> TiledSplitting:
        """The same with a barrier behind every phase."""
        count = len(self.stages)
        stages = [
            replace(stage, gates=(*stage.gates, Gate((at - 1) % count, 1 if at == 0 else 0)))
            for at, stage in enumerate(self.stages)
        ]
        return replace(self, stages=tuple(stages))

    def neighbours(self) -> tuple[Int32s, Int64s]:
        """Number of each neighbour, shape (tiles, directions), -1 for none; and which directions each stage has.

        The second is a set of directions, bit d for direction d, shape (stages,).
        """
        each = [self.inner_offsets(stage) for stage in self.stages]
        directions = sorted({offset for offsets in each for offset in offsets})
        table = np.full((self.tiles, max(1, len(directions))), -1, dtype=np.int32)
        for place, offset in enumerate(directions):
            table[:, place] = self._shifted(offset)
        sets = [sum(1 << directions.index(offset) for offset in set(offsets)) for offsets in each]
        return table, np.array(sets, dtype=np.int64)

    def _shifted(self, offset: Offset) -> Int32s:
        at = np.indices(self.box)
        inside = np.ones(self.box, dtype=bool)
        for axis, (step, side) in enumerate(zip(offset, self.box, strict=True)):
            at[axis] += step
            inside &= (at[axis] >= 0) & (at[axis] < side) | self.periodic
            at[axis] %= side
        number = np.ravel_multi_index(tuple(at), self.box)
        return np.where(inside, number, -1).ravel().astype(np.int32)

    def gate_phases(self) -> tuple[Int64s, Int64s]:
        """Stage and cycles back of each stage's gates, shape (stages, most gates), -1 where there is none."""
        most = max(1, *(len(stage.gates) for stage in self.stages), 1)
        stage_of = np.full((len(self.stages), most), -1, dtype=np.int64)
        back = np.zeros((len(self.stages), most), dtype=np.int64)
        for at, stage in enumerate(self.stages):
            for place, gate in enumerate(stage.gates):
                stage_of[at, place], back[at, place] = gate.stage, gate.back
        return stage_of, back


def packed_costs(stages: Sequence[TileStage]) -> tuple[np.ndarray, ...]:
    """Costs of all stages in flat arrays, as compiled loops take them.

    Patterns end to end with the position, frames and cells of each; cells, shape (stages, tiles); law codes;
    tables end to end with the position of each.
    """
    patterns = [np.ascontiguousarray(stage.cost.pattern_ns, dtype=np.int64) for stage in stages]
    tables = [stage.cost.law.table for stage in stages]
    where = np.array(
        [
            (begin, *pattern.shape, stage.cost.law.code, table)
            for begin, table, pattern, stage in zip(
                np.cumsum([0, *(pattern.size for pattern in patterns[:-1])]),
                np.cumsum([0, *(len(table) for table in tables[:-1])]),
                patterns,
                stages,
                strict=True,
            )
        ],
        dtype=np.int64,
    )
    cells = np.array([stage.cost.cell for stage in stages], dtype=np.int32)
    return np.concatenate([pattern.ravel() for pattern in patterns]), where, cells, np.concatenate(tables)
