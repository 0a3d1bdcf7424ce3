"""What never changes about a stage on one worker, worked out once: neighbours here and there, and rims to cut.

Phases then only fill in which version of each field is read. Fields that one phase wrote are read together.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from itertools import product

from breakstep.engine.program import Program
from breakstep.graph.stages import Stage
from breakstep.graph.tasks import TREE_ARITY
from breakstep.graph.unroll import Phase
from breakstep.mesh.halo import Rim
from breakstep.steps.step import Read

Cut = tuple[str, int, Rim]  # field, consumer tile, rim


@dataclass(frozen=True)
class Reach:
    """What a stage reads of some of its fields, all in one version, as this worker sees it.

    Attributes
    ----------
    here : dict of int to tuple of int
        For each own tile, the own tiles whose arrays it reads: itself, then neighbours.
    there : dict of int to tuple of int
        For each own tile, its neighbours on other workers.
    cuts : dict of int to dict of int to tuple of Cut
        For each own tile, for each other worker, the rims that it must be sent.
    """

    here: dict[int, tuple[int, ...]]
    there: dict[int, tuple[int, ...]]
    cuts: dict[int, dict[int, tuple[Cut, ...]]]


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
        self._reaches: dict[tuple[int, tuple[str, ...]], Reach] = {}

    def reaches(self, phase: Phase) -> list[tuple[int, Reach]]:
        """The versions that a phase reads, by the phases that made them, and how far each is read."""
        names: dict[int, tuple[str, ...]] = {}
        for name, source in phase.sources.items():
            names[source] = (*names.get(source, ()), name)
        return [(source, self.reach(phase.stage, of_source)) for source, of_source in names.items()]

    def reach(self, stage: Stage, names: tuple[str, ...]) -> Reach:
        """How far a stage reads some fields."""
        key = (stage.index, names)
        if key not in self._reaches:
            reads = [read for read in stage.reads if read.field in names and not read.is_local]
            here, there = {}, {}
            for tile in self.tiles:
                plans = [self.program.plans.plan(tile, read) for read in reads]
                around = dict.fromkeys(rim.neighbour for plan in plans for rim in plan.rims)
                own = [other for other in around if self.owners[other] == self.worker]
                here[tile] = tuple(dict.fromkeys((tile, *own)))
                there[tile] = tuple(other for other in around if self.owners[other] != self.worker)
            self._reaches[key] = Reach(here, there, self._cuts(reads))
        return self._reaches[key]

    def _cuts(self, reads: Sequence[Read]) -> dict[int, dict[int, tuple[Cut, ...]]]:
        """Rims of own tiles that tiles elsewhere read."""
        cuts: dict[int, dict[int, list[Cut]]] = {}
        elsewhere = [tile for tile, owner in enumerate(self.owners) if owner != self.worker]
        for read, tile in product(reads, elsewhere):
            for rim in self.program.plans.plan(tile, read).rims:
                if self.owners[rim.neighbour] == self.worker:
                    of_tile = cuts.setdefault(rim.neighbour, {})
                    of_tile.setdefault(self.owners[tile], []).append((read.field, tile, rim))
        return {t: {w: tuple(c) for w, c in to.items()} for t, to in cuts.items()}


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
