"""What never changes about a stage on one worker, worked out once: neighbours here and there, and rims to cut.

Phases then only fill in which version of each field is read.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

from breakstep.engine.program import Program
from breakstep.graph.stages import Stage
from breakstep.graph.tasks import TREE_ARITY
from breakstep.mesh.halo import Rim
from breakstep.steps.step import Read

Cut = tuple[str, int, Rim]  # field, consumer tile, rim


@dataclass(frozen=True)
class HaloRead:
    """One field that a stage reads beyond its tiles, as this worker sees it.

    Attributes
    ----------
    here : dict of int to tuple of int
        For each own tile, its neighbours on this worker.
    there : dict of int to tuple of int
        For each own tile, its neighbours on other workers.
    cuts : dict of int to dict of int to tuple of Cut
        For each own tile, for each other worker, the rims that it must be sent.
    """

    read: Read
    here: dict[int, tuple[int, ...]]
    there: dict[int, tuple[int, ...]]
    cuts: dict[int, dict[int, tuple[Cut, ...]]]


@dataclass(frozen=True)
class StagePlan:
    """One stage on one worker."""

    stage: Stage
    halos: tuple[HaloRead, ...]


@dataclass
class WorkerPlan:
    """All stages on one worker, for one assignment of tiles.

    Parameters
    ----------
    program : Program
    owners : sequence of int
        Worker of each tile.
    worker : int
    """

    program: Program
    owners: Sequence[int]
    worker: int
    tiles: tuple[int, ...] = field(init=False)

    def __post_init__(self) -> None:
        self.tiles = tuple(t for t, owner in enumerate(self.owners) if owner == self.worker)
        self._stages: dict[int, StagePlan] = {}

    def stage(self, index: int) -> StagePlan:
        """The plan of a stage."""
        if index not in self._stages:
            stage = self.program.template.stages[index]
            halos = tuple(self._halo(read) for read in stage.reads if not read.is_local)
            self._stages[index] = StagePlan(stage, halos)
        return self._stages[index]

    def _halo(self, read: Read) -> HaloRead:
        plans, owners = self.program.plans, self.owners
        here, there = {}, {}
        cuts: dict[int, dict[int, list[Cut]]] = {}
        for tile in range(len(owners)):
            rims = plans.plan(tile, read).rims
            if owners[tile] == self.worker:
                neighbours = dict.fromkeys(rim.neighbour for rim in rims)
                here[tile] = tuple(n for n in neighbours if owners[n] == self.worker and n != tile)
                there[tile] = tuple(n for n in neighbours if owners[n] != self.worker)
                continue
            for rim in rims:
                if owners[rim.neighbour] == self.worker:
                    of_tile = cuts.setdefault(rim.neighbour, {})
                    of_tile.setdefault(owners[tile], []).append((read.field, tile, rim))
        frozen = {t: {w: tuple(c) for w, c in to.items()} for t, to in cuts.items()}
        return HaloRead(read, here, there, frozen)


@dataclass(frozen=True)
class TreeNode:
    """One node of the reduction tree over tiles: its place, its children's homes and its parent."""

    level: int
    index: int
    home: int
    children: int


class ReductionTree:
    """The fixed tree by which contributions of all tiles are combined: arity 8 over tile numbers.

    A node lives with the owner of its first tile. The shape depends on the number of tiles alone, so bits
    do not depend on owners.
    """

    def __init__(self, owners: Sequence[int]) -> None:
        self.owners = owners
        self.nodes: dict[tuple[int, int], TreeNode] = {}
        count, level, width = len(owners), 0, 1
        while True:
            parents = -(-count // TREE_ARITY)
            width *= TREE_ARITY
            for index in range(parents):
                children = min(TREE_ARITY, count - index * TREE_ARITY)
                self.nodes[level, index] = TreeNode(level, index, owners[index * width], children)
            if parents == 1:
                break
            count, level = parents, level + 1
        self.top = level

    def place_in_order(self, level: int, index: int) -> int:
        """Position of a node among all nodes, level by level: how tasks number them."""
        before = sum(1 for other, _ in self.nodes if other < level)
        return before + index

    def __len__(self) -> int:
        return len(self.nodes)
