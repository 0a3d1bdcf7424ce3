"""Numbers and edges of a whole phase at once, for dispatches that never hold single tasks.

The same phases give the same numbers wherever they are unrolled: first the phase's step tasks by tile, then
the nodes of each reduction tree it feeds, level by level, then, where a barrier stands, a counter for each
worker and the release.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from breakstep.graph.stages import Stage
from breakstep.graph.tasks import TREE_ARITY, EdgeKind, HaloPlans
from breakstep.graph.unroll import INITIAL, Phase

Integers = NDArray[np.int64]
Edges = tuple[Integers, Integers, EdgeKind]  # producers, consumers, what they carry


def level_sizes(leaves: int) -> list[int]:
    """Nodes on each level of the reduction tree over so many tiles, the root's level last."""
    sizes: list[int] = []
    while not sizes or sizes[-1] > 1:
        leaves = -(-leaves // TREE_ARITY)
        sizes.append(leaves)
    return sizes


@dataclass(frozen=True)
class PhaseNumbers:
    """Where the numbers of one phase begin."""

    steps: int
    trees: dict[int, int]  # reduction instance -> first node
    barrier: int | None  # first counter


class Numbering:
    """Gives phases their numbers in the order in which they are emitted.

    Parameters
    ----------
    tiles, workers : int
    barrier_stages : set of int
        Stages behind which a barrier stands.
    """

    def __init__(self, tiles: int, workers: int, barrier_stages: frozenset[int]) -> None:
        self.tiles, self.workers = tiles, workers
        self.levels = level_sizes(tiles)
        self._before_level = [sum(self.levels[:level]) for level in range(len(self.levels))]
        self._barrier_stages = barrier_stages
        self._next = 0
        self.before = -1  # first step task of the phase that the initial state stands for; -1 for none
        self.phases: dict[int, PhaseNumbers] = {}
        self.instances: dict[int, tuple[int, int]] = {}  # instance -> (phase, first node)

    def add(self, phase: Phase) -> PhaseNumbers:
        """Number a phase."""
        steps = self._take(self.tiles)
        trees = {making.instance: self._take(sum(self.levels)) for making in phase.makes}
        barrier = self._take(self.workers + 1) if phase.stage.index in self._barrier_stages else None
        numbers = self.phases[phase.number] = PhaseNumbers(steps, trees, barrier)
        self.instances.update({instance: (phase.number, first) for instance, first in trees.items()})
        return numbers

    def go_on(self, last_phase: int) -> None:
        """The unrolling starts afresh from the state that a phase left; numbers go on."""
        self.before = self.phases[last_phase].steps if last_phase in self.phases else -1
        self.phases.clear()
        self.instances.clear()

    def step(self, phase: int, tile: int) -> int:
        """Number of a step task; of the initial state, -1 or the task that it stands for."""
        if phase == INITIAL:
            return -1 if self.before < 0 else self.before + tile
        return self.phases[phase].steps + tile

    def node(self, instance: int, level: int, index: int) -> int:
        """Number of a node of a reduction."""
        return self.instances[instance][1] + self._before_level[level] + index

    def root(self, instance: int) -> int:
        """Number of a reduction's root."""
        return self.node(instance, len(self.levels) - 1, 0)

    def counter(self, phase: int, worker: int) -> int:
        """Number of a worker's barrier counter."""
        barrier = self.phases[phase].barrier
        assert barrier is not None
        return barrier + worker

    def release(self, phase: int) -> int:
        """Number of a barrier's release."""
        return self.counter(phase, self.workers)

    def forget(self, before: int) -> None:
        """Drop phases below a number, and the instances they made."""
        for number in [n for n in self.phases if n < before]:
            del self.phases[number]
        for instance in [i for i, (phase, _) in self.instances.items() if phase < before]:
            del self.instances[instance]

    def _take(self, count: int) -> int:
        first, self._next = self._next, self._next + count
        return first


class PhaseEdges:
    """All edges into the tasks of a phase, as arrays.

    Parameters
    ----------
    numbering : Numbering
    plans : HaloPlans
    owners : sequence of int
    arity : int
        Workers below a worker in the barrier tree.
    """

    def __init__(self, numbering: Numbering, plans: HaloPlans, owners: Sequence[int], arity: int) -> None:
        self.numbering, self.plans = numbering, plans
        self.owners = np.array(owners, dtype=np.int64)
        self.arity = arity
        self._reads: dict[tuple[int, tuple[str, ...]], tuple[Integers, Integers]] = {}

    def into(self, phase: Phase) -> Iterator[Edges]:
        """Edges into a phase that has been numbered."""
        first = self.numbering.phases[phase.number].steps
        yield from self._data(phase, first)
        yield from self._values(phase, first)
        yield from self._trees(phase)
        if phase.waits_for is not None:
            tiles = np.arange(self.numbering.tiles)
            yield self._all(self.numbering.release(phase.waits_for), first + tiles, EdgeKind.BARRIER)
        if self.numbering.phases[phase.number].barrier is not None:
            yield from self._barrier(phase, first)

    def _data(self, phase: Phase, first: int) -> Iterator[Edges]:
        by_source: dict[int, list[str]] = {}
        for name, source in phase.sources.items():
            if source != INITIAL or self.numbering.before >= 0:
                by_source.setdefault(source, []).append(name)
        for source, names in by_source.items():
            theirs, ours = self._pairs(phase.stage, tuple(names))
            yield self.numbering.step(source, 0) + theirs, first + ours, EdgeKind.DATA

    def _pairs(self, stage: Stage, names: tuple[str, ...]) -> tuple[Integers, Integers]:
        """Producer and consumer tiles of a stage's reads of some fields, each pair once."""
        key = (stage.index, names)
        if key not in self._reads:
            reads = [read for read in stage.reads if read.field in names]
            pairs = {(tile, tile) for tile in range(self.numbering.tiles)}
            for read in reads:
                if not read.is_local:
                    for tile in range(self.numbering.tiles):
                        pairs |= {(rim.neighbour, tile) for rim in self.plans.plan(tile, read).rims}
            ordered = np.array(sorted(pairs, key=lambda pair: (pair[1], pair[0])), dtype=np.int64)
            self._reads[key] = (ordered[:, 0], ordered[:, 1])
        return self._reads[key]

    def _values(self, phase: Phase, first: int) -> Iterator[Edges]:
        instances = {ref.instance for ref in phase.values.values()}
        if phase.gate is not None:
            instances.add(phase.gate.instance)
        for instance in sorted(instances & self.numbering.instances.keys()):
            yield self._all(self.numbering.root(instance), first + np.arange(self.numbering.tiles), EdgeKind.REDUCTION)

    def _trees(self, phase: Phase) -> Iterator[Edges]:
        numbers = self.numbering.phases[phase.number]
        for making in phase.makes:
            below = numbers.steps + np.arange(self.numbering.tiles)
            for level, size in enumerate(self.numbering.levels):
                nodes = self.numbering.node(making.instance, level, 0) + np.arange(size)
                yield below, nodes[np.arange(len(below)) // TREE_ARITY], EdgeKind.REDUCTION
                below = nodes
            if making.previous in self.numbering.instances:
                assert making.previous is not None
                yield self._all(self.numbering.root(making.previous), below[-1:], EdgeKind.REDUCTION)

    def _barrier(self, phase: Phase, first: int) -> Iterator[Edges]:
        numbering = self.numbering
        tiles = np.arange(numbering.tiles)
        counters = numbering.counter(phase.number, 0) + np.arange(numbering.workers)
        yield first + tiles, counters[self.owners], EdgeKind.BARRIER
        below = np.arange(1, numbering.workers)
        yield counters[below], counters[(below - 1) // self.arity], EdgeKind.BARRIER
        yield self._all(int(counters[0]), np.array([numbering.release(phase.number)]), EdgeKind.BARRIER)

    @staticmethod
    def _all(producer: int, consumers: Integers, kind: EdgeKind) -> Edges:
        return np.full(len(consumers), producer, dtype=np.int64), consumers.astype(np.int64), kind
