"""Event replay with free placement: any thread may run any task (list scheduling).

The tie rule is that of :mod:`breakstep.forecast.dynamic`, and then: as long as there is a free thread and a
ready task, the first task by (rank, task number) is given to a free worker. With the locality choice that is
the free worker holding the most bytes of its inputs, the lowest number among equals; without it, or
when no free worker holds any, the free worker of the lowest number.

Nobody knows beforehand where an output will be read, so a thread fetches a task's inputs when it is given
the task, in the order of edges, and stands idle until they are there. An edge's bytes are charged
whenever its two tasks ran on different workers, so an edge from a tile to itself has to carry the tile's arrays.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from breakstep.forecast.dynamic import ready_keys
from breakstep.forecast.graph import ALL_KINDS, Int8s, Int32s, Int64s, Number, ReplayGraph
from breakstep.forecast.model import MachineModel
from breakstep.forecast.results import Counts, Replay, replay_of
from breakstep.profile.compiling import compiled_loop


def replay_free(
    graph: ReplayGraph,
    machine: MachineModel,
    rank: Int32s | None = None,
    kinds: int = ALL_KINDS,
    locality: bool = True,
) -> Replay:
    """Play a graph with each task wherever a thread is free.

    Parameters
    ----------
    graph : ReplayGraph
    machine : MachineModel
    rank : ndarray of int32, shape (tasks,), optional
        Lower runs first; equal ranks run in program order. None: program order.
    kinds : int
        Set of edge kinds that bind; others are not there.
    locality : bool
        Prefer a free worker that holds inputs; otherwise the lowest free number.
    """
    out = graph.outgoing
    counts = Counts.none(machine.workers)
    times = np.zeros(graph.tasks, dtype=np.int64), np.zeros(graph.tasks, dtype=np.int64)
    slot = np.full(graph.tasks, -1, dtype=np.int32)
    order = np.empty(graph.tasks, dtype=np.int32)
    numbers = (machine.threads, machine.overhead_ns, machine.alpha_ns, machine.ps_per_byte, machine.tree_ns)
    done = _play(
        graph.duration_ns,
        (graph.first, graph.producer, graph.edge_bytes, graph.edge_kind),
        (out.first, out.consumer, out.edge_kind),
        graph.on_worker,
        ready_keys(graph.tasks, rank),
        np.int64(kinds),
        numbers,
        (machine.contention, locality),
        times,
        slot,
        order,
        (counts.busy_ns, counts.started, counts.received_bytes, counts.messages),
    )
    return replay_of(graph, machine, times, slot, order[:done], counts)


@compiled_loop
def _push(heap: Int64s, size: Number, time: Number, code: Number) -> Number:
    """Add an event to a heap of pairs (time, code); the new size."""
    at = size
    while at > 0:
        up = (at - 1) >> 1
        if heap[up, 0] < time or (heap[up, 0] == time and heap[up, 1] <= code):
            break
        heap[at, 0] = heap[up, 0]
        heap[at, 1] = heap[up, 1]
        at = up
    heap[at, 0] = time
    heap[at, 1] = code
    return size + 1


@compiled_loop
def _pop(heap: Int64s, size: Number) -> Number:
    """Take the first event away; the new size."""
    size -= 1
    time, code = heap[size, 0], heap[size, 1]
    at = 0
    while True:
        child = 2 * at + 1
        if child >= size:
            break
        right = child + 1
        if right < size and (
            heap[right, 0] < heap[child, 0] or (heap[right, 0] == heap[child, 0] and heap[right, 1] < heap[child, 1])
        ):
            child = right
        if time < heap[child, 0] or (time == heap[child, 0] and code <= heap[child, 1]):
            break
        heap[at, 0] = heap[child, 0]
        heap[at, 1] = heap[child, 1]
        at = child
    heap[at, 0] = time
    heap[at, 1] = code
    return size


@compiled_loop
def _push_key(keys: Int64s, base: Number, size: Number, key: Number) -> None:
    """Add a ready task to the heap of keys that begins at ``base``."""
    at = size
    while at > 0:
        up = (at - 1) >> 1
        if keys[base + up] <= key:
            break
        keys[base + at] = keys[base + up]
        at = up
    keys[base + at] = key


@compiled_loop
def _pop_key(keys: Int64s, base: Number, size: Number) -> Number:
    """Take the first key away from the heap at ``base`` that held ``size``; the key."""
    first = keys[base]
    size -= 1
    key = keys[base + size]
    at = 0
    while True:
        child = 2 * at + 1
        if child >= size:
            break
        if child + 1 < size and keys[base + child + 1] < keys[base + child]:
            child += 1
        if key <= keys[base + child]:
            break
        keys[base + at] = keys[base + child]
        at = child
    keys[base + at] = key
    return first


@compiled_loop
def _choose(
    edges: tuple[Int64s, Int32s, Int32s, Int8s],
    task: Number,
    kinds: Number,
    slot: Int32s,
    threads: Number,
    free: Int64s,
    held: Int64s,
) -> Number:
    """The free worker that holds most bytes of a task's inputs, or -1; ``held`` is all zero before and after."""
    first, producer, size, kind = edges
    best = -1
    for edge in range(first[task], first[task + 1]):
        if (kinds >> kind[edge]) & 1 and slot[producer[edge]] >= 0:
            held[slot[producer[edge]] // threads] += size[edge]
    for edge in range(first[task], first[task + 1]):
        if slot[producer[edge]] < 0:
            continue
        worker = slot[producer[edge]] // threads
        if free[worker] > 0 and held[worker] > 0:
            better = best < 0 or held[worker] > held[best]
            if better or (held[worker] == held[best] and worker < best):
                best = worker
    for edge in range(first[task], first[task + 1]):
        if slot[producer[edge]] >= 0 and (best < 0 or slot[producer[edge]] // threads != best):
            held[slot[producer[edge]] // threads] = 0
    if best >= 0:
        held[best] = 0
    return best


@compiled_loop
def _fetched(
    edges: tuple[Int64s, Int32s, Int32s, Int8s],
    task: Number,
    kinds: Number,
    slot: Int32s,
    worker: Number,
    now: Number,
    numbers: tuple[int, int, int, int, int],
    contention: bool,
    link: Int64s,
    counts: tuple[Int64s, Int64s, Int64s, Int64s],
) -> Number:
    """When the inputs of a task given to ``worker`` now are all there."""
    first, producer, size, kind = edges
    threads, _, alpha, beta, _ = numbers
    ready = now
    for edge in range(first[task], first[task + 1]):
        source = slot[producer[edge]]
        if source < 0 or source // threads == worker or not (kinds >> kind[edge]) & 1:
            continue
        arrival = now + alpha
        if contention:
            arrival = max(arrival, link[worker]) + size[edge] * beta // 1000
            link[worker] = arrival
        else:
            arrival += size[edge] * beta // 1000
        ready = max(ready, arrival)
        counts[2][worker] += size[edge]
        counts[3][worker] += 1
    return ready


@compiled_loop
def _play(
    duration: Int64s,
    edges: tuple[Int64s, Int32s, Int32s, Int8s],
    out: tuple[Int64s, Int32s, Int8s],
    step: NDArray[np.bool_],
    keys: Int64s,
    kinds: Number,
    numbers: tuple[int, int, int, int, int],
    options: tuple[bool, bool],
    times: tuple[Int64s, Int64s],
    slot: Int32s,
    order: Int32s,
    counts: tuple[Int64s, Int64s, Int64s, Int64s],
) -> Number:
    """The event loop; how many tasks finished. All events are finishes, by (time, task number)."""
    out_first, consumer, out_kind = out
    threads, overhead, _, _, tree = numbers
    contention, locality = options
    start, finish = times
    tasks, workers = len(duration), len(counts[0])
    low = (np.int64(1) << 32) - 1
    heap = np.empty((tasks + 1, 2), dtype=np.int64)
    size = 0
    ready = np.empty(tasks + 1, dtype=np.int64)
    readies = 0
    free = np.full(workers, threads, dtype=np.int64)
    idle = np.arange(workers)  # a heap with every free worker in it, and perhaps some that are not free any more
    idles = workers
    listed = np.ones(workers, dtype=np.bool_)
    free_threads = workers * threads
    taken = np.zeros(workers * threads, dtype=np.bool_)
    link = np.zeros(workers, dtype=np.int64)
    held = np.zeros(workers, dtype=np.int64)
    missing = np.zeros(tasks, dtype=np.int32)
    for task in range(tasks):
        for edge in range(edges[0][task], edges[0][task + 1]):
            missing[task] += (kinds >> edges[3][edge]) & 1
        if missing[task] > 0:
            continue
        if step[task]:
            _push_key(ready, 0, readies, keys[task])
            readies += 1
        else:
            size = _push(heap, size, tree + duration[task], task)
    done = 0
    now = np.int64(0)
    while True:
        while readies > 0 and free_threads > 0:
            task = _pop_key(ready, 0, readies) & low
            readies -= 1
            worker = _choose(edges, task, kinds, slot, threads, free, held) if locality else -1
            if worker < 0:
                while free[idle[0]] == 0:
                    listed[idle[0]] = False
                    _pop_key(idle, 0, idles)
                    idles -= 1
                worker = idle[0]
            free[worker] -= 1
            free_threads -= 1
            spot = worker * threads
            while taken[spot]:
                spot += 1
            taken[spot] = True
            start[task] = _fetched(edges, task, kinds, slot, worker, now, numbers, contention, link, counts)
            slot[task] = spot
            counts[0][worker] += duration[task]
            counts[1][worker] += 1
            size = _push(heap, size, start[task] + overhead + duration[task], task)
        if size == 0:
            return done
        now = heap[0, 0]
        while size > 0 and heap[0, 0] == now:
            task = heap[0, 1]
            size = _pop(heap, size)
            finish[task] = now
            order[done] = task
            done += 1
            if slot[task] >= 0:
                worker = slot[task] // threads
                taken[slot[task]] = False
                free[worker] += 1
                free_threads += 1
                if not listed[worker]:
                    listed[worker] = True
                    _push_key(idle, 0, idles, worker)
                    idles += 1
            for edge in range(out_first[task], out_first[task + 1]):
                if not (kinds >> out_kind[edge]) & 1:
                    continue
                other = consumer[edge]
                missing[other] -= 1
                if missing[other] > 0:
                    continue
                if step[other]:
                    _push_key(ready, 0, readies, keys[other])
                    readies += 1
                else:
                    start[other] = now
                    size = _push(heap, size, now + tree + duration[other], other)
