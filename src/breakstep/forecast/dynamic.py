"""Event replay where every task runs on the worker that owns its tile.

What a worker does next is decided while it plays: each worker keeps its ready tasks in a heap, and a free thread
takes the first by rank.

The tie rule, which a second engine must share to agree to the nanosecond. At each moment all events of
that moment are booked, arrivals before finishes, then by task number, with those that booking adds.
Then free threads, lowest first, take ready tasks, lowest (rank, task number) first. A task that takes no
time finishes in the same moment, and the round repeats. A run begins with the threads' turn: free threads take
steps without inputs before anything is booked, also control nodes that have none.

An output crosses to another worker as soon as it is made: it is there ``alpha + bytes * beta`` later. With
contention, each worker's incoming link serves one message at a time, in the order of the producers'
finishes (the booking order), then of consumers; latency is not on the link, bandwidth is.
"""

from __future__ import annotations

import numpy as np

from breakstep.errors import ForecastError
from breakstep.forecast.graph import ALL_KINDS, Int8s, Int32s, Int64s, Number, ReplayGraph
from breakstep.forecast.model import MachineModel
from breakstep.forecast.results import Counts, Replay, replay_of
from breakstep.profile.compiling import compiled_loop


def replay_owner(
    graph: ReplayGraph, machine: MachineModel, owner: Int32s, rank: Int32s | None = None, kinds: int = ALL_KINDS
) -> Replay:
    """Play a graph with each task on its owner.

    Parameters
    ----------
    graph : ReplayGraph
    machine : MachineModel
    owner : ndarray of int32, shape (tasks,)
        Worker of each step, 0 <= owner < workers; ignored for control nodes.
    rank : ndarray of int32, shape (tasks,), optional
        Lower runs first; equal ranks run in program order. None: program order.
    kinds : int
        Set of edge kinds that bind; others are not there.

    Raises
    ------
    ForecastError
        A step's owner is no worker of the machine.
    """
    steps = graph.on_worker
    owner = checked_owner(graph, machine, owner)
    out = graph.outgoing
    keys = ready_keys(graph.tasks, rank)
    counts = Counts.none(machine.workers)
    bins = np.zeros(machine.workers + 1, dtype=np.int64)
    np.cumsum(np.bincount(owner[steps], minlength=machine.workers), out=bins[1:])
    times = np.zeros(graph.tasks, dtype=np.int64), np.zeros(graph.tasks, dtype=np.int64)
    slot = np.full(graph.tasks, -1, dtype=np.int32)
    order = np.empty(graph.tasks, dtype=np.int32)
    numbers = (machine.threads, machine.overhead_ns, machine.alpha_ns, machine.ps_per_byte, machine.tree_ns)
    done = _play(
        graph.duration_ns,
        graph.first,
        graph.edge_kind,
        (out.first, out.consumer, out.edge_bytes, out.edge_kind),
        owner,
        keys,
        bins,
        np.int64(kinds),
        numbers,
        machine.contention,
        times,
        slot,
        order,
        (counts.busy_ns, counts.started, counts.received_bytes, counts.messages),
    )
    return replay_of(graph, machine, times, slot, order[:done], counts)


def checked_owner(graph: ReplayGraph, machine: MachineModel, owner: Int32s) -> Int32s:
    """Owners as int32, -1 for control nodes.

    Raises
    ------
    ForecastError
        A step's owner is no worker of the machine.
    """
    owner = np.where(graph.on_worker, owner, -1).astype(np.int32)
    wrong = graph.on_worker & ((owner < 0) | (owner >= machine.workers))
    if np.any(wrong):
        task = int(np.argmax(wrong))
        raise ForecastError(
            f"Task {task} belongs to worker {owner[task]}; expected a worker from 0 to {machine.workers - 1}."
            " Place all tiles on workers of the machine."
        )
    return owner


def ready_keys(tasks: int, rank: Int32s | None) -> Int64s:
    """One number a task, smaller for what runs first: rank, then task number."""
    keys = np.arange(tasks, dtype=np.int64)
    return keys if rank is None else keys + (rank.astype(np.int64) << 32)


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
def _play(
    duration: Int64s,
    first: Int64s,
    in_kind: Int8s,
    out: tuple[Int64s, Int32s, Int32s, Int8s],
    owner: Int32s,
    keys: Int64s,
    bins: Int64s,
    kinds: Number,
    numbers: tuple[int, int, int, int, int],
    contention: bool,
    times: tuple[Int64s, Int64s],
    slot: Int32s,
    order: Int32s,
    counts: tuple[Int64s, Int64s, Int64s, Int64s],
) -> Number:
    """The event loop; how many tasks finished.

    An event's code is the task number, plus ``finishing`` for a finish. A task whose inputs are there when
    they are booked becomes ready without an event.
    """
    out_first, consumer, out_bytes, out_kind = out
    threads, overhead, alpha, beta, tree = numbers
    start, finish = times
    busy, started, received, messages = counts
    tasks, workers = len(duration), len(bins) - 1
    finishing = np.int64(1) << 32
    heap = np.empty((tasks + 1, 2), dtype=np.int64)
    size = 0
    ready = np.empty(bins[workers], dtype=np.int64)
    waiting_tasks = np.zeros(workers, dtype=np.int64)  # how many keys each worker's heap holds
    free = np.full(workers, threads, dtype=np.int64)
    taken = np.zeros(workers * threads, dtype=np.bool_)
    link = np.zeros(workers, dtype=np.int64)
    touched = np.empty(workers, dtype=np.int64)
    marked = np.zeros(workers, dtype=np.bool_)
    touches = 0
    # A row a task: the moment all inputs known so far are there; inputs missing * 2^32 + owner + 1.
    state = np.zeros((tasks, 2), dtype=np.int64)
    one = np.int64(1) << 32
    low = one - 1
    for task in range(tasks):
        missing = 0
        for edge in range(first[task], first[task + 1]):
            missing += (kinds >> in_kind[edge]) & 1
        state[task, 1] = missing * one + owner[task] + 1
        if missing > 0:
            continue
        worker = owner[task]
        if worker < 0:
            size = _push(heap, size, tree + duration[task], finishing + task)
        else:
            _push_key(ready, bins[worker], waiting_tasks[worker], keys[task])
            waiting_tasks[worker] += 1
            if not marked[worker]:
                marked[worker] = True
                touched[touches] = worker
                touches += 1
    now = np.int64(0)
    done = 0
    while True:
        for place in range(touches):
            worker = touched[place]
            marked[worker] = False
            while free[worker] > 0 and waiting_tasks[worker] > 0:
                task = _pop_key(ready, bins[worker], waiting_tasks[worker]) & low
                waiting_tasks[worker] -= 1
                free[worker] -= 1
                spot = worker * threads
                while taken[spot]:
                    spot += 1
                taken[spot] = True
                slot[task] = spot
                start[task] = now
                busy[worker] += duration[task]
                started[worker] += 1
                size = _push(heap, size, now + overhead + duration[task], finishing + task)
        touches = 0
        if size == 0:
            return done
        now = heap[0, 0]
        while size > 0 and heap[0, 0] == now:
            code = heap[0, 1]
            size = _pop(heap, size)
            task = code & low
            worker = owner[task]
            if code < finishing:
                _push_key(ready, bins[worker], waiting_tasks[worker], keys[task])
                waiting_tasks[worker] += 1
                if not marked[worker]:
                    marked[worker] = True
                    touched[touches] = worker
                    touches += 1
                continue
            finish[task] = now
            order[done] = task
            done += 1
            if worker >= 0:
                free[worker] += 1
                taken[slot[task]] = False
                if not marked[worker]:
                    marked[worker] = True
                    touched[touches] = worker
                    touches += 1
            for edge in range(out_first[task], out_first[task + 1]):
                if not (kinds >> out_kind[edge]) & 1:
                    continue
                other = consumer[edge]
                target = (state[other, 1] & low) - 1
                arrival = now
                if worker >= 0 and target >= 0 and target != worker:
                    arrival += alpha
                    if contention:
                        arrival = max(arrival, link[target]) + out_bytes[edge] * beta // 1000
                        link[target] = arrival
                    else:
                        arrival += out_bytes[edge] * beta // 1000
                    received[target] += out_bytes[edge]
                    messages[target] += 1
                if arrival > state[other, 0]:
                    state[other, 0] = arrival
                state[other, 1] -= one
                if state[other, 1] >= one:
                    continue
                arrival = state[other, 0]
                if target < 0:
                    start[other] = arrival
                    size = _push(heap, size, arrival + tree + duration[other], finishing + other)
                elif arrival > now:
                    size = _push(heap, size, arrival, np.int64(other))
                else:
                    _push_key(ready, bins[target], waiting_tasks[target], keys[other])
                    waiting_tasks[target] += 1
                    if not marked[target]:
                        marked[target] = True
                        touched[touches] = target
                        touches += 1
