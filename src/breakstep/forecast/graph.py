"""A task graph in compact arrays, as the replay engines read it.

Tasks stand in program order, which is a topological order: every edge goes from a lower number to a
higher. Three kinds of task: steps, which occupy a thread of a worker, and two kinds of control nodes,
reductions and barriers, which occupy nobody: a control node has one edge in from, and one edge out to,
each task concerned (P in, P out, not P squared), and is done a delay after its last input.

Every edge has a kind, a small number: 0 is data; the others are the reductions and barriers by name. A set of
kinds is an integer, bit k for kind k; engines take such a set and see no other edges. So any barrier
can be lifted without building another graph.

Knows arrays; refuses to know where they come from.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from breakstep.errors import ForecastError
from breakstep.profile.compiling import compiled_loop

STEP, REDUCTION, BARRIER = 0, 1, 2
DATA = 0  # the edge kind of tile data
MAX_EDGE_KINDS = 62  # bits of a non-negative int64
ALL_KINDS = (1 << MAX_EDGE_KINDS) - 1

Int8s = NDArray[np.int8]
Int32s = NDArray[np.int32]
Int64s = NDArray[np.int64]

#: A number inside compiled loops: an int64 or a float64 there, whether Python or numpy made it.
Number: TypeAlias = Any


@dataclass(frozen=True)
class Outgoing:
    """Edges by producer: those out of task t are ``first[t]`` to ``first[t + 1]``, in the order of consumers."""

    first: Int64s
    consumer: Int32s
    edge_bytes: Int32s
    edge_kind: Int8s


@dataclass(frozen=True)
class ReplayGraph:
    """Tasks and edges of one run.

    Parameters
    ----------
    duration_ns : ndarray of int64, shape (tasks,)
        Time in kernels, ghost zones and packing, without the dispatch [ns]; of a control node the
        delay that is there on any machine (usually 0: the tree's time comes from the machine).
    kind : ndarray of int8, shape (tasks,)
        ``STEP``, ``REDUCTION`` or ``BARRIER``.
    name : ndarray of int32, shape (tasks,)
        Position in ``names``: the stage of a step, or the reduction or barrier.
    tile, cycle, iteration : ndarray of int32, shape (tasks,)
        As in the profile; -1 for none.
    output_bytes : ndarray of int64, shape (tasks,)
        Arrays that the task makes and keeps [bytes].
    first : ndarray of int64, shape (tasks + 1,)
        Edges into task t are ``first[t]`` to ``first[t + 1]``.
    producer : ndarray of int32, shape (edges,)
        The task at the other end.
    edge_bytes : ndarray of int32, shape (edges,)
        What crosses when the two ends are on different workers [bytes]; 0 for control.
    edge_kind : ndarray of int8, shape (edges,)
        Position in ``edge_kinds``.
    names, edge_kinds : tuple of str
        ``edge_kinds[0]`` is ``"data"``; the others are like ``"reduction:dt"`` and ``"barrier:burn"``.
    """

    duration_ns: Int64s
    kind: Int8s
    name: Int32s
    tile: Int32s
    cycle: Int32s
    iteration: Int32s
    output_bytes: Int64s
    first: Int64s
    producer: Int32s
    edge_bytes: Int32s
    edge_kind: Int8s
    names: tuple[str, ...]
    edge_kinds: tuple[str, ...]

    @property
    def tasks(self) -> int:
        """Number of tasks, control nodes included."""
        return len(self.duration_ns)

    @property
    def edges(self) -> int:
        """Number of edges."""
        return len(self.producer)

    @property
    def consumer(self) -> Int32s:
        """The task that each edge goes into, shape (edges,)."""
        return np.repeat(np.arange(self.tasks, dtype=np.int32), np.diff(self.first))

    @cached_property
    def outgoing(self) -> Outgoing:
        """The same edges sorted by producer; made once, when first asked for."""
        return Outgoing(*_turned(self.tasks, self.first, self.producer, self.edge_bytes, self.edge_kind))

    @property
    def on_worker(self) -> NDArray[np.bool_]:
        """Which tasks are steps, shape (tasks,)."""
        steps: NDArray[np.bool_] = self.kind == STEP
        return steps

    def kinds_of(self, prefix: str) -> list[int]:
        """Edge kinds whose names begin with ``prefix``, for example ``"barrier:"``."""
        return [code for code, name in enumerate(self.edge_kinds) if name.startswith(prefix)]

    def without(self, kinds: Sequence[int]) -> int:
        """The set of all edge kinds but these."""
        return ALL_KINDS & ~sum(1 << kind for kind in set(kinds))

    def with_durations(self, duration_ns: Int64s) -> ReplayGraph:
        """The same graph with other durations [ns]."""
        return replace(self, duration_ns=np.ascontiguousarray(duration_ns, dtype=np.int64))

    def owners(self, worker_of_tile: Int32s) -> Int32s:
        """Worker of each task when tiles stay where they are put; -1 for control nodes."""
        owner = np.asarray(worker_of_tile, dtype=np.int32)[self.tile]
        return np.where(self.kind == STEP, owner, -1).astype(np.int32)


def build_graph(
    duration_ns: Sequence[int] | Int64s,
    producer: Sequence[int] | Int64s,
    consumer: Sequence[int] | Int64s,
    *,
    kind: Sequence[int] | Int8s | None = None,
    name: Sequence[int] | Int32s | None = None,
    tile: Sequence[int] | Int32s | None = None,
    cycle: Sequence[int] | Int32s | None = None,
    iteration: Sequence[int] | Int32s | None = None,
    output_bytes: Sequence[int] | Int64s | None = None,
    edge_bytes: Sequence[int] | Int64s | None = None,
    edge_kind: Sequence[int] | Int8s | None = None,
    names: Sequence[str] = ("task",),
    edge_kinds: Sequence[str] = ("data",),
) -> ReplayGraph:
    """A graph from lists of tasks and of edges, in any order of edges.

    What is left out is filled in: steps only, tile -1, no bytes, data edges.

    Raises
    ------
    ForecastError
        An edge does not go from a lower task number to a higher, or a number is out of its range.
    """
    durations = np.ascontiguousarray(duration_ns, dtype=np.int64)
    ends = np.asarray(producer, dtype=np.int64), np.asarray(consumer, dtype=np.int64)
    tasks, edges = len(durations), len(ends[0])
    sizes = _filled(edge_bytes, edges, 0, np.int64)
    kinds = _filled(edge_kind, edges, DATA, np.int8)
    _check(durations, ends, sizes, kinds, edge_kinds)
    order = np.argsort(ends[1], kind="stable")
    first = np.zeros(tasks + 1, dtype=np.int64)
    np.cumsum(np.bincount(ends[1], minlength=tasks), out=first[1:])
    return ReplayGraph(
        durations,
        _filled(kind, tasks, STEP, np.int8),
        _filled(name, tasks, 0, np.int32),
        _filled(tile, tasks, -1, np.int32),
        _filled(cycle, tasks, -1, np.int32),
        _filled(iteration, tasks, -1, np.int32),
        _filled(output_bytes, tasks, 0, np.int64),
        first,
        ends[0][order].astype(np.int32),
        sizes[order].astype(np.int32),
        kinds[order],
        tuple(names),
        tuple(edge_kinds),
    )


def _filled(values: object, length: int, default: int, kind: type) -> NDArray[np.signedinteger]:
    if values is None:
        return np.full(length, default, dtype=kind)
    return np.ascontiguousarray(values, dtype=kind)


def _check(
    durations: Int64s,
    ends: tuple[Int64s, Int64s],
    sizes: Int64s,
    kinds: Int8s,
    edge_kinds: Sequence[str],
) -> None:
    producer, consumer = ends
    tasks = len(durations)
    faults = []
    if np.any(durations < 0):
        faults.append(f"task {int(np.argmax(durations < 0))} has a negative duration")
    bad = (producer < 0) | (producer >= consumer) | (consumer >= tasks)
    if np.any(bad):
        edge = int(np.argmax(bad))
        faults.append(
            f"edge {edge} goes from task {producer[edge]} to task {consumer[edge]}; expected a lower number"
            f" first, both from 0 to {tasks - 1}"
        )
    if np.any((sizes < 0) | (sizes >= 2**31)):
        faults.append("an edge carries a negative number of bytes, or 2 GiB and more")
    if len(edge_kinds) > MAX_EDGE_KINDS:
        faults.append(f"{len(edge_kinds)} kinds of edges; expected at most {MAX_EDGE_KINDS}")
    if np.any((kinds < 0) | (kinds >= len(edge_kinds))):
        faults.append("an edge has a kind without a name")
    if faults:
        raise ForecastError("A task graph cannot be replayed: " + "; ".join(faults) + ".", faults=faults)


@compiled_loop
def _turned(
    tasks: int, first: Int64s, producer: Int32s, edge_bytes: Int32s, edge_kind: Int8s
) -> tuple[Int64s, Int32s, Int32s, Int8s]:
    out_first = np.zeros(tasks + 1, dtype=np.int64)
    for edge in range(len(producer)):
        out_first[producer[edge] + 1] += 1
    for task in range(tasks):
        out_first[task + 1] += out_first[task]
    place = out_first[:-1].copy()
    consumer = np.empty_like(producer)
    out_bytes = np.empty_like(edge_bytes)
    out_kind = np.empty_like(edge_kind)
    for task in range(tasks):
        for edge in range(first[task], first[task + 1]):
            spot = place[producer[edge]]
            place[producer[edge]] += 1
            consumer[spot] = task
            out_bytes[spot] = edge_bytes[edge]
            out_kind[spot] = edge_kind[edge]
    return out_first, consumer, out_bytes, out_kind
