"""Unfolding: a program on its tiles as the graph that the replay engines read.

One node for each step task, reduction and barrier. Barriers stand behind all stages; which of them count is a set
of edge kinds, chosen when the graph is replayed.
"""

from __future__ import annotations

from collections.abc import Collection, Iterable
from dataclasses import dataclass

import numpy as np

from breakstep.forecast.graph import (
    ALL_KINDS,
    BARRIER,
    REDUCTION,
    STEP,
    Int8s,
    Int32s,
    Int64s,
    ReplayGraph,
    build_graph,
)
from breakstep.forecast.program import Floats, Program
from breakstep.forecast.rims import edge_sizes
from breakstep.forecast.waits import waits


@dataclass(frozen=True)
class Unfolded:
    """A program's graph.

    Attributes
    ----------
    first : ndarray of int64, shape (phases,)
        Number of each phase's first step task; one for each tile follows.
    """

    program: Program
    graph: ReplayGraph
    first: Int64s

    def durations(self, by_phase: Floats) -> Int64s:
        """Durations of all nodes [ns], from those of step tasks, shape (phases, tiles)."""
        found = np.zeros(self.graph.tasks, dtype=np.int64)
        found[self.steps] = np.rint(np.maximum(by_phase, 0.0)).astype(np.int64).reshape(-1)
        return found

    @property
    def steps(self) -> Int64s:
        """Numbers of step tasks, phase by phase and tile by tile."""
        tiles = np.arange(self.program.tile_count, dtype=np.int64)
        return (self.first[:, None] + tiles[None, :]).reshape(-1)

    def without_barriers(self, names: Collection[str]) -> int:
        """Edge kinds in force when barriers of these names are off: a stage keeps its barrier while it holds
        a name that is on, as the command line has it."""
        off = [f"barrier:{stage}" for stage in self.program.stages if set(stage.split("+")) <= set(names)]
        kinds = [code for code, kind in enumerate(self.graph.edge_kinds) if kind in off]
        return self.graph.without(kinds)

    @property
    def lockstep(self) -> int:
        """All barriers in force."""
        return ALL_KINDS

    @property
    def tasked(self) -> int:
        """No barrier in force."""
        return self.without_barriers(self.program.barrier_names)


def unfold(program: Program, by_phase: Floats | None = None) -> Unfolded:
    """The graph of a program.

    Parameters
    ----------
    by_phase : ndarray of float64, shape (phases, tiles), optional
        Duration of each step task [ns]; the costs as they are if not given.
    """
    nodes = _Nodes(program)
    edges = _Edges(program, nodes)
    graph = build_graph(
        np.zeros(nodes.count, dtype=np.int64), *edges.ends(),
        kind=_bytes(nodes.kind), name=_halves(nodes.name), tile=_halves(nodes.tile), cycle=_halves(nodes.cycle),
        iteration=_halves(nodes.iteration), output_bytes=nodes.output, edge_bytes=edges.joined("size"),
        edge_kind=_bytes(edges.joined("kind")), names=nodes.names, edge_kinds=nodes.edge_kinds,
    )  # fmt: skip
    unfolded = Unfolded(program, graph, nodes.first)
    if by_phase is None:
        by_phase = program.costs.duration({})[[phase.cost for phase in program.phases]]
    return Unfolded(program, graph.with_durations(unfolded.durations(by_phase)), nodes.first)


def _bytes(values: Int64s) -> Int8s:
    return values.astype(np.int8)


def _halves(values: Int64s) -> Int32s:
    return values.astype(np.int32)


class _Nodes:
    """Numbers of all nodes: for each phase its step tasks, the reductions it makes, its barrier."""

    def __init__(self, program: Program) -> None:
        tiles, stages = program.tile_count, program.stages
        made = tuple(dict.fromkeys(name for phase in program.phases for name in phase.makes))
        self.edge_kinds = ("data", *(f"reduction:{name}" for name in made), *(f"barrier:{s}" for s in stages))
        self.names = (*stages, *made)
        self.reductions: dict[tuple[int, str], int] = {}
        self.barriers: list[int] = []
        starts: list[int] = []
        extra: list[tuple[int, int, int, int]] = []
        self.count = 0
        for number, phase in enumerate(program.phases):
            starts.append(self.count)
            self.count += tiles
            for name in phase.makes:
                self.reductions[number, name] = self._take(extra, REDUCTION, self.names.index(name), phase.cycle)
            self.barriers.append(self._take(extra, BARRIER, stages.index(phase.stage), phase.cycle))
        self.first = np.array(starts, dtype=np.int64)
        self._fill(program, extra)

    def _take(self, extra: list[tuple[int, int, int, int]], kind: int, name: int, cycle: int) -> int:
        extra.append((self.count, kind, name, cycle))
        self.count += 1
        return self.count - 1

    def _fill(self, program: Program, extra: Iterable[tuple[int, int, int, int]]) -> None:
        tiles, stages = program.tile_count, program.stages
        steps = (self.first[:, None] + np.arange(tiles)[None, :]).reshape(-1)

        def column(values: Iterable[int]) -> Int64s:
            whole = np.full(self.count, -1, dtype=np.int64)
            whole[steps] = np.repeat(np.fromiter(values, dtype=np.int64, count=len(program.phases)), tiles)
            return whole

        self.kind = np.full(self.count, STEP, dtype=np.int64)
        place = {stage: i for i, stage in enumerate(stages)}
        self.name = column(place[phase.stage] for phase in program.phases)
        self.cycle = column(phase.cycle for phase in program.phases)
        self.iteration = column(phase.iteration for phase in program.phases)
        self.tile = np.full(self.count, -1, dtype=np.int64)
        self.tile[steps] = np.tile(np.arange(tiles), len(program.phases))
        rows = [phase.cost for phase in program.phases]
        self.output = np.zeros(self.count, dtype=np.int64)
        self.output[steps] = program.costs.output[rows].astype(np.int64).reshape(-1)
        if extra:
            which, kind, name, cycle = np.array(list(extra), dtype=np.int64).T
            self.kind[which], self.name[which], self.cycle[which] = kind, name, cycle


class _Edges:
    """All edges, in pieces."""

    def __init__(self, program: Program, nodes: _Nodes) -> None:
        self.parts: dict[str, list[Int64s]] = {"producer": [], "consumer": [], "size": [], "kind": []}
        self._codes = {kind: code for code, kind in enumerate(nodes.edge_kinds)}
        self._program, self._nodes = program, nodes
        self._tiles = np.arange(program.tile_count, dtype=np.int64)
        self._data()
        self._reductions()
        self._barriers()

    def joined(self, column: str) -> Int64s:
        """One column of all edges."""
        return np.concatenate([np.empty(0, dtype=np.int64), *self.parts[column]])

    def ends(self) -> tuple[Int64s, Int64s]:
        """Producers and consumers of all edges."""
        return self.joined("producer"), self.joined("consumer")

    def _add(self, producer: Int64s, consumer: Int64s, kind: str, size: Int64s | None = None) -> None:
        self.parts["producer"].append(producer)
        self.parts["consumer"].append(consumer)
        self.parts["kind"].append(np.full(len(producer), self._codes[kind], dtype=np.int64))
        self.parts["size"].append(size if size is not None else np.zeros(len(producer), dtype=np.int64))

    def _data(self) -> None:
        program, first = self._program, self._nodes.first
        sizes: dict[tuple[str, int], Int64s] = {}
        for number, phase in enumerate(program.phases):
            for source, place in phase.reads:
                pattern, stage = program.patterns[place], program.phases[source].stage
                if (stage, place) not in sizes:
                    sizes[stage, place] = edge_sizes(program, stage, pattern)
                self._add(
                    first[source] + pattern.producer, first[number] + pattern.consumer, "data", sizes[stage, place]
                )

    def _reductions(self) -> None:
        first, same = self._nodes.first, np.ones_like(self._tiles)
        for (phase, name), node in self._nodes.reductions.items():
            self._add(first[phase] + self._tiles, node * same, f"reduction:{name}")
        for wait in waits(self._program):
            node = self._nodes.reductions[wait.made_by, wait.name]
            self._add(node * same, first[wait.used_by] + self._tiles, f"reduction:{wait.name}")

    def _barriers(self) -> None:
        """A phase stands behind the barrier before it, and behind those that the phase before stood behind unless
        its own data say so already: then lifting one kind of barrier leaves the others in force."""
        first, same = self._nodes.first, np.ones_like(self._tiles)
        behind: dict[int, str] = {}
        for number, phase in enumerate(self._program.phases):
            if number and not self._follows(number):
                behind = {**behind, **self._before(number)}
            elif number:
                behind = self._before(number)
            for node, kind in behind.items():
                self._add(node * same, first[number] + self._tiles, kind)
            self._add(first[number] + self._tiles, self._nodes.barriers[number] * same, f"barrier:{phase.stage}")

    def _before(self, number: int) -> dict[int, str]:
        return {self._nodes.barriers[number - 1]: f"barrier:{self._program.phases[number - 1].stage}"}

    def _follows(self, number: int) -> bool:
        """Whether each tile's task reads its own tile's task of the phase before."""
        for source, place in self._program.phases[number].reads:
            pattern = self._program.patterns[place]
            own = pattern.producer == pattern.consumer
            if source == number - 1 and len(np.unique(pattern.consumer[own])) == self._program.tile_count:
                return True
        return False
