"""Replay in a fixed order: every thread runs its tasks, and every link its messages, in the order of a schedule.

Nothing is decided while it plays, so it is one pass, and a longest path: shorter tasks, fewer edges, a
faster network never make it longer. Playing the order that a replay or a run had gives its makespan again.
Many variants are played side by side, in lanes: one walk over the graph, one number a lane.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from breakstep.errors import ForecastError
from breakstep.forecast.graph import ALL_KINDS, Int8s, Int32s, Int64s, Number, ReplayGraph
from breakstep.forecast.model import MachineModel
from breakstep.forecast.results import Counts, Replay, replay_of
from breakstep.profile.compiling import compiled_loop

LANES = 8  # a row of eight int64 is one cache line; wider rows gained nothing here
_FAR = np.int64(1) << 62


@dataclass(frozen=True)
class Schedule:
    """Who ran what, in which order.

    Parameters
    ----------
    slot : ndarray of int32, shape (tasks,)
        Thread of each step, ``worker * threads + thread``; -1 for control nodes.
    order : ndarray of int32, shape (tasks,)
        Tasks by finish: every task after its inputs and after its predecessor on its thread.
    """

    slot: Int32s
    order: Int32s

    @classmethod
    def of(cls, replay: Replay) -> Schedule:
        """The schedule that a replay found."""
        return cls(replay.slot, replay.order)


@dataclass(frozen=True)
class Variant:
    """One what-if at a fixed order.

    Parameters
    ----------
    machine : MachineModel
        As many workers and threads as the schedule has; all else is free.
    kinds : int
        Set of edge kinds that bind.
    factors : mapping of int to float
        What durations are multiplied by, for some of the names (positions in ``graph.names``).
    """

    machine: MachineModel
    kinds: int = ALL_KINDS
    factors: Mapping[int, float] = field(default_factory=dict)


def replay_fixed(graph: ReplayGraph, machine: MachineModel, schedule: Schedule, kinds: int = ALL_KINDS) -> Replay:
    """Play a graph in the order of a schedule.

    Raises
    ------
    ForecastError
        The schedule is not one of this graph on this machine.
    """
    _check(graph, machine, schedule, kinds)
    out = graph.outgoing
    counts = Counts.none(machine.workers)
    times = np.zeros(graph.tasks, dtype=np.int64), np.zeros(graph.tasks, dtype=np.int64)
    numbers = (machine.threads, machine.overhead_ns, machine.alpha_ns, machine.ps_per_byte, machine.tree_ns)
    _walk(
        graph.duration_ns,
        (out.first, out.consumer, out.edge_bytes, out.edge_kind),
        schedule.slot,
        schedule.order,
        np.int64(kinds),
        numbers,
        machine.contention,
        times,
        (counts.busy_ns, counts.started, counts.received_bytes, counts.messages),
    )
    order = np.lexsort((np.argsort(schedule.order), times[1])).astype(np.int32)
    return replay_of(graph, machine, times, schedule.slot, order, counts)


def fixed_makespans(graph: ReplayGraph, schedule: Schedule, variants: Sequence[Variant], jobs: int = 2) -> Int64s:
    """Makespan of each variant [ns], shape (variants,), on ``jobs`` threads of this process.

    Raises
    ------
    ForecastError
        The schedule is not one of this graph on one of the machines.
    """
    bound = 0
    for variant in variants:
        bound |= variant.kinds
    for machine in {variant.machine for variant in variants}:
        _check(graph, machine, schedule, bound)
        bound = 0  # edges need to be looked at once
    groups = [variants[at : at + LANES] for at in range(0, len(variants), LANES)]
    graph.outgoing  # noqa: B018  (made once, before the threads share it)
    with ThreadPoolExecutor(max(1, jobs)) as pool:
        found = list(pool.map(lambda group: _group(graph, schedule, group), groups))
    return np.concatenate([np.zeros(0, dtype=np.int64), *found])


def recorded_schedule(
    graph: ReplayGraph, slot: Int32s, start_ns: Int64s, finish_ns: Int64s, kinds: int = ALL_KINDS
) -> Schedule:
    """The order of a recorded run in which the edges of ``kinds`` bound.

    Clocks of workers agree only so well, so a task may seem to be done before its input. The order
    on each thread is then kept, and the tasks are sorted by the earliest times that it allows.

    Raises
    ------
    ForecastError
        The threads' orders and the edges contradict each other.
    """
    slot = np.asarray(slot, dtype=np.int32)
    order = np.lexsort((np.arange(graph.tasks), start_ns, finish_ns)).astype(np.int32)
    place = np.argsort(order)
    if not _misplaced(graph.first, graph.producer, graph.edge_kind, place, np.int64(kinds)):
        return Schedule(slot, order)
    by_thread = np.lexsort((np.arange(graph.tasks), finish_ns, start_ns, slot))
    by_thread = by_thread[slot[by_thread] >= 0]
    then = np.full(graph.tasks, -1, dtype=np.int64)
    same = slot[by_thread[:-1]] == slot[by_thread[1:]]
    then[by_thread[:-1][same]] = by_thread[1:][same]
    out = graph.outgoing
    sorted_tasks = _sorted(graph.first, graph.edge_kind, out.first, out.consumer, out.edge_kind, then, np.int64(kinds))
    if len(sorted_tasks) < graph.tasks:
        raise ForecastError(
            f"{graph.tasks - len(sorted_tasks)} of {graph.tasks} tasks of the recorded order would wait for each"
            " other: its threads ran them in an order that the edges forbid."
        )
    threads = int(slot.max(initial=0)) + 1
    earliest = replay_fixed(graph, MachineModel(threads), Schedule(slot, sorted_tasks), kinds)
    return Schedule(slot, earliest.order)


def _check(graph: ReplayGraph, machine: MachineModel, schedule: Schedule, kinds: int) -> None:
    fits = len(schedule.slot) == len(schedule.order) == graph.tasks
    if not fits or schedule.slot.max(initial=-1) >= machine.slots or np.any(schedule.slot[graph.on_worker] < 0):
        raise ForecastError(
            f"A schedule of {len(schedule.order)} tasks on threads up to {schedule.slot.max(initial=-1)} was given;"
            f" expected {graph.tasks} tasks on threads 0 to {machine.slots - 1}."
        )
    place = np.full(graph.tasks, -1, dtype=np.int64)
    place[schedule.order] = np.arange(graph.tasks)
    wrong = _misplaced(graph.first, graph.producer, graph.edge_kind, place, np.int64(kinds))
    if place.min(initial=0) < 0 or wrong:
        raise ForecastError(
            f"A schedule was given in which {wrong} of {graph.edges} edges point backwards; expected every task"
            " once, after its inputs. Play the schedule with the edge kinds that bound in it."
        )


def _group(graph: ReplayGraph, schedule: Schedule, variants: Sequence[Variant]) -> Int64s:
    """Makespans of up to LANES variants."""
    lanes = [variants[min(lane, len(variants) - 1)] for lane in range(LANES)]
    machines = [variant.machine for variant in lanes]
    kinds = np.array([variant.kinds for variant in lanes], dtype=np.int64)
    codes = np.arange(len(graph.edge_kinds))[:, np.newaxis]
    gate = np.where((kinds >> codes) & 1, 0, -_FAR)
    factor = np.ones((len(graph.names), LANES))
    for lane, variant in enumerate(lanes):
        for name, value in variant.factors.items():
            factor[name, lane] = value
    numbers = [
        (machine.overhead_ns, machine.alpha_ns, machine.ps_per_byte, machine.tree_ns, machine.contention)
        for machine in machines
    ]
    out = graph.outgoing
    makespans = np.zeros(LANES, dtype=np.int64)
    _walk_lanes(
        graph.duration_ns,
        graph.name,
        (out.first, out.consumer, out.edge_bytes, out.edge_kind),
        schedule.slot,
        schedule.order,
        machines[0].threads,
        machines[0].slots,
        np.array(numbers, dtype=np.int64).T.copy(),
        gate,
        factor,
        np.any(factor != 1, axis=1),
        makespans,
    )
    return makespans[: len(variants)]


@compiled_loop
def _misplaced(first: Int64s, producer: Int32s, edge_kind: Int8s, place: Int64s, kinds: Number) -> Number:
    """How many edges lead to a task that stands before its input."""
    wrong = 0
    for task in range(len(place)):
        for edge in range(first[task], first[task + 1]):
            if (kinds >> edge_kind[edge]) & 1 and place[producer[edge]] >= place[task]:
                wrong += 1
    return wrong


@compiled_loop
def _sorted(
    first: Int64s,
    in_kind: Int8s,
    out_first: Int64s,
    consumer: Int32s,
    out_kind: Int8s,
    then: Int64s,
    kinds: Number,
) -> Int32s:
    """Tasks in an order that edges and threads allow; fewer than all when they contradict each other."""
    tasks = len(then)
    missing = np.zeros(tasks, dtype=np.int64)
    for task in range(tasks):
        for edge in range(first[task], first[task + 1]):
            missing[task] += (kinds >> in_kind[edge]) & 1
    for task in range(tasks):
        if then[task] >= 0:
            missing[then[task]] += 1
    order = np.empty(tasks, dtype=np.int32)
    count = 0
    for task in range(tasks):
        if missing[task] == 0:
            order[count] = task
            count += 1
    taken = 0
    while taken < count:
        task = order[taken]
        taken += 1
        for edge in range(out_first[task], out_first[task + 1]):
            if not (kinds >> out_kind[edge]) & 1:
                continue
            missing[consumer[edge]] -= 1
            if missing[consumer[edge]] == 0:
                order[count] = consumer[edge]
                count += 1
        after = then[task]
        if after >= 0:
            missing[after] -= 1
            if missing[after] == 0:
                order[count] = after
                count += 1
    return order[:count]


@compiled_loop
def _walk(
    duration: Int64s,
    out: tuple[Int64s, Int32s, Int32s, Int8s],
    slot: Int32s,
    order: Int32s,
    kinds: Number,
    numbers: tuple[int, int, int, int, int],
    contention: bool,
    times: tuple[Int64s, Int64s],
    counts: tuple[Int64s, Int64s, Int64s, Int64s],
) -> None:
    """One pass in the schedule's order; ``start`` holds the latest arrival until its task's turn."""
    out_first, consumer, out_bytes, out_kind = out
    threads, overhead, alpha, beta, tree = numbers
    start, finish = times
    busy, started, received, messages = counts
    free = np.zeros(len(busy) * threads, dtype=np.int64)
    link = np.zeros(len(busy), dtype=np.int64)
    for place in range(len(order)):
        task = order[place]
        spot = slot[task]
        worker = spot // threads if spot >= 0 else -1
        if worker < 0:
            end = start[task] + tree + duration[task]
        else:
            start[task] = max(start[task], free[spot])
            end = start[task] + overhead + duration[task]
            free[spot] = end
            busy[worker] += duration[task]
            started[worker] += 1
        finish[task] = end
        for edge in range(out_first[task], out_first[task + 1]):
            if not (kinds >> out_kind[edge]) & 1:
                continue
            other = consumer[edge]
            arrival = end
            if worker >= 0 and slot[other] >= 0 and slot[other] // threads != worker:
                target = slot[other] // threads
                arrival += alpha
                if contention:
                    arrival = max(arrival, link[target]) + out_bytes[edge] * beta // 1000
                    link[target] = arrival
                else:
                    arrival += out_bytes[edge] * beta // 1000
                received[target] += out_bytes[edge]
                messages[target] += 1
            start[other] = max(start[other], arrival)


@compiled_loop
def _walk_lanes(
    duration: Int64s,
    name: Int32s,
    out: tuple[Int64s, Int32s, Int32s, Int8s],
    slot: Int32s,
    order: Int32s,
    threads: Number,
    slots: Number,
    numbers: Int64s,
    gate: Int64s,
    factor: NDArray[np.float64],
    scaled: NDArray[np.bool_],
    makespans: Int64s,
) -> None:
    """The same pass for eight variants; a closed gate is an arrival before all time."""
    out_first, consumer, out_bytes, out_kind = out
    overhead, alpha, beta, tree, contention = numbers[0], numbers[1], numbers[2], numbers[3], numbers[4]
    ready = np.zeros((len(order), LANES), dtype=np.int64)
    free = np.zeros((slots, LANES), dtype=np.int64)
    link = np.zeros((slots // threads, LANES), dtype=np.int64)
    end = np.zeros(LANES, dtype=np.int64)
    length = np.zeros(LANES, dtype=np.int64)
    for place in range(len(order)):
        task = order[place]
        spot = slot[task]
        for lane in range(LANES):
            length[lane] = duration[task]
        if scaled[name[task]]:
            for lane in range(LANES):
                length[lane] = np.int64(np.rint(duration[task] * factor[name[task], lane]))
        if spot < 0:
            worker = -1
            for lane in range(LANES):
                end[lane] = ready[task, lane] + tree[lane] + length[lane]
        else:
            worker = spot // threads
            for lane in range(LANES):
                end[lane] = max(ready[task, lane], free[spot, lane]) + overhead[lane] + length[lane]
                free[spot, lane] = end[lane]
        for edge in range(out_first[task], out_first[task + 1]):
            other = consumer[edge]
            kind = out_kind[edge]
            target = slot[other]
            if threads > 1 and target >= 0:
                target //= threads
            if worker < 0 or target < 0 or target == worker:
                for lane in range(LANES):
                    ready[other, lane] = max(ready[other, lane], end[lane] + gate[kind, lane])
                continue
            size = np.int64(out_bytes[edge])
            for lane in range(LANES):
                if gate[kind, lane] < 0:
                    continue
                arrival = end[lane] + alpha[lane]
                if contention[lane]:
                    arrival = max(arrival, link[target, lane]) + size * beta[lane] // 1000
                    link[target, lane] = arrival
                else:
                    arrival += size * beta[lane] // 1000
                ready[other, lane] = max(ready[other, lane], arrival)
    for spot in range(slots):
        for lane in range(LANES):
            makespans[lane] = max(makespans[lane], free[spot, lane])
