"""A run as arrays: who ran what when, when each input arrived, and where threads stood idle.

This turns the tables into what :mod:`breakstep.profile.causes` walks on. Tasks are addressed by their
position in the task table, which ascends with their numbers.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from breakstep.profile.causes import BARRIER, COMBINE, NEVER, STEP, Blocks, Inputs, Timeline
from breakstep.profile.compiling import compiled_loop
from breakstep.profile.frames import Frames, Integers, codes_of, integers, positions, thread_keys, words_of
from breakstep.profile.schema import EDGE_KINDS, TASK_KINDS


def timeline_of(frames: Frames) -> Timeline:
    """Build the timeline of a run whose tables are sound."""
    tasks = frames["tasks"]
    start, end = integers(tasks, "start_ns"), integers(tasks, "end_ns")
    threads = np.sort(thread_keys(frames["threads"]))
    thread = positions(threads, thread_keys(tasks))
    return Timeline(
        start=start,
        end=end,
        worker=integers(tasks, "worker"),
        thread=thread,
        kind=_kinds(frames),
        stage=words_of(tasks, "stage")[0],
        inputs=_latest_inputs(frames),
        blocks=_blocks(start, end, thread, len(threads)),
    )


def _latest_inputs(frames: Frames) -> Inputs:
    tasks, edges = frames["tasks"], frames["edges"]
    numbers = integers(tasks, "task")
    producer = positions(numbers, integers(edges, "producer"))
    consumer = positions(numbers, integers(edges, "consumer"))
    kind = codes_of(edges, "kind", EDGE_KINDS)
    arrival = _arrivals(frames, producer, consumer)
    return Inputs(*_pick_latest(len(tasks), NEVER, producer, consumer, kind, kind == BARRIER, arrival))


def _kinds(frames: Frames) -> Integers:
    """Kinds of tasks; a node in which a kernel ran counts as a step: who waits for it waits for that."""
    tasks, intervals = frames["tasks"], frames["intervals"]
    kind = codes_of(tasks, "kind", TASK_KINDS)
    at_work = intervals.loc[(intervals["what"] == "kernel").to_numpy(), "task"].unique()
    return np.where((kind == COMBINE) & tasks["task"].isin(at_work).to_numpy(), STEP, kind).astype(np.int64)


def _arrivals(frames: Frames, producer: Integers, consumer: Integers) -> Integers:
    """When each edge's input could be used [ns]: its end, or when its last bytes came from another worker."""
    tasks, transfers = frames["tasks"], frames["transfers"]
    worker = integers(tasks, "worker")
    arrival = integers(tasks, "end_ns")[producer]
    if len(transfers) == 0:
        return arrival
    workers = int(integers(frames["threads"], "worker").max()) + 1
    sender = positions(integers(tasks, "task"), integers(transfers, "producer"))
    key = sender * workers + integers(transfers, "to_worker")
    keys, group = np.unique(key, return_inverse=True)
    came = np.full(len(keys), NEVER, dtype=np.int64)
    np.maximum.at(came, group, integers(transfers, "arrived_ns"))
    across = np.flatnonzero(worker[producer] != worker[consumer])
    place = positions(keys, producer[across] * workers + worker[consumer[across]])
    arrival[across[place >= 0]] = came[place[place >= 0]]
    return arrival


@compiled_loop
def _pick_latest(
    tasks: int,
    never: int,
    producer: Integers,
    consumer: Integers,
    kind: Integers,
    is_barrier: NDArray[np.bool_],
    arrival: Integers,
) -> tuple[Integers, Integers, Integers, Integers, Integers]:
    """The latest input of each task; of several at the same moment the lowest task, then the lowest kind."""
    data_from, data_kind = np.full(tasks, -1, np.int64), np.full(tasks, -1, np.int64)
    data_at = np.full(tasks, never, np.int64)
    barrier_from, barrier_at = np.full(tasks, -1, np.int64), np.full(tasks, never, np.int64)
    for edge in range(len(producer)):
        p, c, k, at = producer[edge], consumer[edge], kind[edge], arrival[edge]
        if is_barrier[edge]:
            if at > barrier_at[c] or (at == barrier_at[c] and p < barrier_from[c]):
                barrier_from[c], barrier_at[c] = p, at
        elif at > data_at[c] or (at == data_at[c] and (p < data_from[c] or (p == data_from[c] and k < data_kind[c]))):
            data_from[c], data_kind[c], data_at[c] = p, k, at
    return data_from, data_kind, data_at, barrier_from, barrier_at


def _blocks(start: Integers, end: Integers, thread: Integers, threads: int) -> Blocks:
    order = np.lexsort((end, start, thread))  # stable: of equal times, the lower task number first
    begin, until, busy_before, opener, owner = _merge(start, end, thread, order)
    first = np.searchsorted(owner, np.arange(threads + 1)).astype(np.int64)
    return Blocks(begin, until, busy_before, opener, first)


@compiled_loop
def _merge(
    start: Integers, end: Integers, thread: Integers, order: Integers
) -> tuple[Integers, Integers, Integers, Integers, Integers]:
    """Merge tasks that touch or overlap on their thread."""
    size = len(order)
    begin, until = np.empty(size, np.int64), np.empty(size, np.int64)
    busy_before, opener = np.empty(size, np.int64), np.empty(size, np.int64)
    owner = np.empty(size, np.int64)
    count = 0
    for task in order:
        last = count - 1
        same_thread = count > 0 and owner[last] == thread[task]
        if same_thread and start[task] <= until[last]:
            until[last] = max(until[last], end[task])
            continue
        busy_before[count] = busy_before[last] + until[last] - begin[last] if same_thread else 0
        begin[count], until[count] = start[task], end[task]
        opener[count], owner[count] = task, thread[task]
        count += 1
    return begin[:count], until[:count], busy_before[:count], opener[:count], owner[:count]
