"""What no schedule can beat, and how bad a greedy one can get.

Sources, from memory: work and span, R. P. Brent, J. ACM 21 (1974) 201; greedy and list-change bounds, R. L. Graham,
SIAM J. Appl. Math. 17 (1969) 416; mandatory work in intervals, E. B. Fernandez and B. Bussell, IEEE Trans. Comput.
C-22 (1973) 745.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from breakstep.forecast.dynamic import checked_owner
from breakstep.forecast.graph import ALL_KINDS, Int8s, Int32s, Int64s, Number, ReplayGraph
from breakstep.forecast.model import MachineModel
from breakstep.profile.compiling import compiled_loop


@dataclass(frozen=True)
class Bounds:
    """Lower bounds of the makespan [ns].

    Parameters
    ----------
    area_ns : int
        All work over all threads.
    path_ns : int
        The critical path: with owners its transfers and the trees of control nodes are in it, without
        owners the trees alone.
    worker_ns : int
        With owners: the worst worker's least head, load and least tail; without: 0.
    """

    area_ns: int
    path_ns: int
    worker_ns: int

    @property
    def best_ns(self) -> int:
        """The largest of them."""
        return max(self.area_ns, self.path_ns, self.worker_ns)


def lower_bounds(
    graph: ReplayGraph, machine: MachineModel, owner: Int32s | None = None, kinds: int = ALL_KINDS
) -> Bounds:
    """Bounds for a graph on a machine; ``owner`` None means that any thread may run any task."""
    steps = graph.on_worker
    lengths = graph.duration_ns[steps] + machine.overhead_ns
    area = -(-int(lengths.sum()) // machine.slots)
    head, tail = heads(graph, machine, owner, kinds), tails(graph, machine, owner, kinds)
    path = int(tail.max(initial=0))
    if owner is None:
        return Bounds(area, path, 0)
    homes = checked_owner(graph, machine, owner)[steps]
    load = np.zeros(machine.workers, dtype=np.int64)
    np.add.at(load, homes, lengths)
    first = np.full(machine.workers, np.iinfo(np.int64).max)
    last = first.copy()
    np.minimum.at(first, homes, head[steps])
    np.minimum.at(last, homes, tail[steps] - lengths)
    used = load > 0
    worker = first[used] + -(-load[used] // machine.threads) + last[used]
    return Bounds(area, path, int(worker.max(initial=0)))


def heads(graph: ReplayGraph, machine: MachineModel, owner: Int32s | None = None, kinds: int = ALL_KINDS) -> Int64s:
    """Earliest start of each task on as many threads as it likes [ns], shape (tasks,)."""
    earliest = np.zeros(graph.tasks, dtype=np.int64)
    _heads(*_paths_input(graph, machine, owner, kinds), earliest)
    return earliest


def tails(graph: ReplayGraph, machine: MachineModel, owner: Int32s | None = None, kinds: int = ALL_KINDS) -> Int64s:
    """Longest path from each task's start to the end of a step [ns], shape (tasks,); -1 where no step follows.

    With all owners different every edge is charged its transfer: the upward rank of
    H. Topcuoglu, S. Hariri and M.-Y. Wu, IEEE Trans. Parallel Distrib. Syst. 13 (2002) 260.
    """
    longest = np.full(graph.tasks, -1, dtype=np.int64)
    _tails(*_paths_input(graph, machine, owner, kinds), longest)
    return longest


def tail_ranks(
    graph: ReplayGraph, machine: MachineModel, owner: Int32s | None = None, kinds: int = ALL_KINDS
) -> Int32s:
    """Ranks that run the task with the longest tail first, shape (tasks,)."""
    _, rank = np.unique(-tails(graph, machine, owner, kinds), return_inverse=True)
    return rank.astype(np.int32)


def interval_bound(graph: ReplayGraph, slots: int, kinds: int = ALL_KINDS, points: int = 48) -> int:
    """The mandatory-work bound of Fernandez and Bussell on ``slots`` threads [ns], without overhead and transfers.

    Work that must be done in an interval, however tasks shift within the critical path's length, may be
    more than the threads can do in it. Intervals begin and end at the tasks' earliest and latest starts
    and ends; of more than ``points`` moments, so many are taken, evenly by rank (any choice is a bound).
    """
    machine = MachineModel(slots)
    steps = graph.on_worker
    length = graph.duration_ns[steps]
    head, tail = heads(graph, machine, None, kinds)[steps], tails(graph, machine, None, kinds)[steps]
    span = int((head + tail).max(initial=0))
    latest = span - tail
    moments = np.unique(np.concatenate([head, latest, head + length, latest + length]))
    if len(moments) > points:
        moments = moments[np.linspace(0, len(moments) - 1, points).round().astype(np.int64)]
    excess = int(_most_excess(moments, head, latest, length, slots))
    return span + max(0, -(-excess // slots))


def greedy_ns(work_ns: int, span_ns: int, slots: int) -> int:
    """What a greedy schedule with free placement and free transfers never exceeds (Graham, Brent) [ns]."""
    return span_ns + -(-(work_ns - span_ns) // slots)


def list_change_factor(slots_before: int, slots_after: int) -> float:
    """How much longer a list schedule can get by another list, fewer edges, shorter tasks, other threads (Graham)."""
    return 1 + (slots_before - 1) / slots_after


_PathsInput = tuple[Int64s, tuple[Int64s, Int32s, Int32s, Int8s], Int8s, Int32s, np.int64, tuple[int, int, int, int]]


def _paths_input(graph: ReplayGraph, machine: MachineModel, owner: Int32s | None, kinds: int) -> _PathsInput:
    home = np.zeros(graph.tasks, dtype=np.int32) if owner is None else np.asarray(owner, dtype=np.int32)
    numbers = (machine.overhead_ns, machine.alpha_ns, machine.ps_per_byte, machine.tree_ns)
    edges = (graph.first, graph.producer, graph.edge_bytes, graph.edge_kind)
    return graph.duration_ns, edges, graph.kind, home, np.int64(kinds), numbers


@compiled_loop
def _heads(
    duration: Int64s,
    edges: tuple[Int64s, Int32s, Int32s, Int8s],
    kind: Int8s,
    owner: Int32s,
    kinds: Number,
    numbers: tuple[int, int, int, int],
    earliest: Int64s,
) -> None:
    first, producer, size, edge_kind = edges
    overhead, alpha, beta, tree = numbers
    for task in range(len(duration)):
        for edge in range(first[task], first[task + 1]):
            if not (kinds >> edge_kind[edge]) & 1:
                continue
            source = producer[edge]
            arrival = earliest[source] + duration[source] + (overhead if kind[source] == 0 else tree)
            if kind[source] == 0 and kind[task] == 0 and owner[source] != owner[task]:
                arrival += alpha + size[edge] * beta // 1000
            earliest[task] = max(earliest[task], arrival)


@compiled_loop
def _tails(
    duration: Int64s,
    edges: tuple[Int64s, Int32s, Int32s, Int8s],
    kind: Int8s,
    owner: Int32s,
    kinds: Number,
    numbers: tuple[int, int, int, int],
    longest: Int64s,
) -> None:
    """Before a task's turn its entry holds the longest way on from its end, -1 for none."""
    first, producer, size, edge_kind = edges
    overhead, alpha, beta, tree = numbers
    for task in range(len(duration) - 1, -1, -1):
        if kind[task] == 0:
            longest[task] = max(longest[task], 0) + duration[task] + overhead
        elif longest[task] >= 0:
            longest[task] += duration[task] + tree
        else:
            continue
        for edge in range(first[task], first[task + 1]):
            if not (kinds >> edge_kind[edge]) & 1:
                continue
            source = producer[edge]
            way = longest[task]
            if kind[source] == 0 and kind[task] == 0 and owner[source] != owner[task]:
                way += alpha + size[edge] * beta // 1000
            longest[source] = max(longest[source], way)


@compiled_loop
def _most_excess(moments: Int64s, head: Int64s, latest: Int64s, length: Int64s, slots: Number) -> Number:
    most = np.int64(0)
    for i in range(len(moments)):
        for j in range(i + 1, len(moments)):
            begin, end = moments[i], moments[j]
            work = np.int64(0)
            for task in range(len(head)):
                inside = min(end - begin, length[task])
                inside = min(inside, head[task] + length[task] - begin, end - latest[task])
                work += max(np.int64(0), inside)
            most = max(most, work - slots * (end - begin))
    return most
