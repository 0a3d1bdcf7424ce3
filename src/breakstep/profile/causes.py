"""Why was a thread idle? From the end of a gap back along the inputs that arrived last.

A gap ends with the start of a task. At any moment ``t`` of the gap, the cause is found like this:

1. Everything the task needs is there: the dispatch is at fault (engine). If ``t`` was reached from a later
   task, and the thread meanwhile ran other tasks, the wait is what it was for that later task.
2. A barrier is missing and nothing else: the wait is a barrier's; go to the barrier's task.
3. Otherwise go to the input that arrived last: the wait is a reduction's over a reduction edge. Over a data
   edge it is a neighbour's, unless the way here already led over a reduction or a barrier.

At the input's task: after its end the input was under way to another worker. Over a data edge that is transfer; a
reduction's or a barrier's message is part of what the reduction or the barrier costs. While it ran, a step
makes the wait what it is; packing is transfer, and the bookkeeping of reductions and barriers is engine.
Before its start, ask again from 1 for that task. So dispatch that is slow at the far end of a wait is booked
as engine, and not on the neighbour.

The walk does this for whole intervals at once. It needs a graph without cycles, and no more than that: time
stamps that contradict the graph, as badly aligned clocks make them, move bookings but lose no nanosecond.
"""

from __future__ import annotations

from typing import Final, NamedTuple

import numpy as np

from breakstep.profile.compiling import compiled_loop
from breakstep.profile.frames import Integers

#: The accounts that a gap can be booked under, in the order of their codes.
WAITS: Final = ("neighbour", "reduction", "barrier", "transfer", "engine")
NEIGHBOUR, REDUCED, HELD, MOVED, DISPATCH = range(5)
#: What was going on, in the order of its codes: the second half of an explanation.
REASONS: Final = ("ready", "queued", "under way", "running")
READY, QUEUED, UNDER_WAY, RUNNING = range(4)

#: Places in the schema's EDGE_KINDS and TASK_KINDS, written out for the reason given in ``compiling``.
DATA, REDUCTION, BARRIER = 0, 1, 2
STEP, COMBINE, COUNT, RELEASE, PACK = range(5)
#: Earlier than every time stamp: the arrival of an input that does not exist.
NEVER: Final = -(2**62)
_UNDECIDED = -1
#: Columns of a part: account, reason, task at fault, begin, end, and how much of that is meant [ns].
PART_COLUMNS: Final = ("account", "reason", "task", "start_ns", "end_ns", "ns")
_ACCOUNT, _REASON, _TASK, _BEGIN, _END, _AMOUNT = range(6)


class Inputs(NamedTuple):
    """For each task its input that arrived last, once among its data and reductions, once among its barriers.

    Attributes
    ----------
    data_from, data_kind, barrier_from : ndarray of int64, shape (tasks,)
        Position of the input's task (-1 for none), and DATA or REDUCTION.
    data_at, barrier_at : ndarray of int64, shape (tasks,)
        Moment of its arrival [ns], NEVER for none.
    """

    data_from: Integers
    data_kind: Integers
    data_at: Integers
    barrier_from: Integers
    barrier_at: Integers


class Blocks(NamedTuple):
    """Each thread's time in tasks, as blocks without idle time inside, in the order of threads, then time.

    Attributes
    ----------
    begin, end : ndarray of int64, shape (blocks,)
        [ns]
    busy_before : ndarray of int64, shape (blocks,)
        Time in earlier blocks of the same thread [ns].
    opener : ndarray of int64, shape (blocks,)
        Position of the task that opens the block: the one that the idle time before it ends with.
    first : ndarray of int64, shape (threads + 1,)
        Where each thread's blocks start.
    """

    begin: Integers
    end: Integers
    busy_before: Integers
    opener: Integers
    first: Integers


class Timeline(NamedTuple):
    """Everything that the walk along causes reads.

    Attributes
    ----------
    start, end : ndarray of int64, shape (tasks,)
        [ns]
    worker, thread, kind, stage : ndarray of int64, shape (tasks,)
        Worker number; row in the thread table sorted by worker and thread; place in TASK_KINDS; code of the
        stage's name.
    """

    start: Integers
    end: Integers
    worker: Integers
    thread: Integers
    kind: Integers
    stage: Integers
    inputs: Inputs
    blocks: Blocks


@compiled_loop
def _busy_until(blocks: Blocks, thread: int, moment: int) -> int:
    """Time that a thread spent in tasks before a moment [ns]."""
    low, high = blocks.first[thread], blocks.first[thread + 1]
    start = low
    while low < high:
        middle = (low + high) // 2
        if blocks.begin[middle] < moment:
            low = middle + 1
        else:
            high = middle
    if low == start:
        return 0
    last = low - 1
    return blocks.busy_before[last] + min(moment, blocks.end[last]) - blocks.begin[last]  # type: ignore[no-any-return]


@compiled_loop
def _put(parts: Integers, count: int, account: int, reason: int, task: int, low: int, high: int, amount: int) -> int:
    """Write a part where there is room; count it either way."""
    if count < len(parts):
        parts[count, _ACCOUNT] = account
        parts[count, _REASON] = reason
        parts[count, _TASK] = task
        parts[count, _BEGIN] = low
        parts[count, _END] = high
        parts[count, _AMOUNT] = amount
    return count + 1


@compiled_loop
def _at_task(run: Timeline, task: int, low: int, high: int, why: int, parts: Integers, count: int) -> int:
    """Book an interval in which a task had all it needed and did not run yet."""
    if why == _UNDECIDED:  # the gap's own thread, which is idle
        return _put(parts, count, DISPATCH, READY, task, low, high, high - low)
    thread = run.thread[task]
    busy = _busy_until(run.blocks, thread, high) - _busy_until(run.blocks, thread, low)
    if busy > 0:
        count = _put(parts, count, why, QUEUED, task, low, high, busy)
    if high - low > busy:
        count = _put(parts, count, DISPATCH, READY, task, low, high, high - low - busy)
    return count


@compiled_loop
def _through(
    run: Timeline, source: int, low: int, high: int, why: int, moving: int, parts: Integers, count: int
) -> int:
    """Book an interval of waiting for an input, as far as the input's task had begun."""
    made = max(low, run.end[source])
    if made < high:  # on another worker only: on its own, an input arrives at its task's end
        count = _put(parts, count, moving, UNDER_WAY, source, made, high, high - made)
    begun, until = max(low, run.start[source]), min(high, run.end[source])
    if begun < until:
        account = DISPATCH
        if run.kind[source] == STEP:
            account = why
        elif run.kind[source] == PACK:
            account = MOVED
        count = _put(parts, count, account, RUNNING, source, begun, until, until - begun)
    return count


@compiled_loop
def _with_room(stack: Integers, size: int) -> Integers:
    """The stack, twice as long where fewer than two more rows fit."""
    if size + 2 <= len(stack):
        return stack
    longer = np.empty((2 * len(stack) + 2, 4), np.int64)
    longer[:size] = stack[:size]
    return longer


@compiled_loop
def _walk(run: Timeline, task: int, low: int, high: int, parts: Integers) -> int:
    """Explain the wait [low, high] of a task's thread; return how many parts there are, fitting or not."""
    inputs = run.inputs
    stack = np.empty((16, 4), np.int64)
    stack[0, 0], stack[0, 1], stack[0, 2], stack[0, 3] = task, low, high, _UNDECIDED
    size, count = 1, 0
    while size > 0:
        size -= 1
        task, low, high, why = stack[size, 0], stack[size, 1], stack[size, 2], stack[size, 3]
        stack = _with_room(stack, size)
        data_at, barrier_at = inputs.data_at[task], inputs.barrier_at[task]
        ready = max(low, data_at, barrier_at)
        if ready < high:
            count = _at_task(run, task, ready, high, why, parts, count)
        if barrier_at > data_at:
            begin, end, source = max(low, data_at), min(high, barrier_at), inputs.barrier_from[task]
            if begin < end:
                count = _through(run, source, begin, end, HELD, HELD, parts, count)
            if begin < min(end, run.start[source]):
                stack[size, 0], stack[size, 1] = source, begin
                stack[size, 2], stack[size, 3] = min(end, run.start[source]), HELD
                size += 1
        end, source = min(high, data_at), inputs.data_from[task]
        if low < end:
            if inputs.data_kind[task] == REDUCTION:
                why = REDUCED
            elif why == _UNDECIDED:
                why = NEIGHBOUR
            moving = REDUCED if inputs.data_kind[task] == REDUCTION else MOVED
            count = _through(run, source, low, end, why, moving, parts, count)
            if low < min(end, run.start[source]):
                stack[size, 0], stack[size, 1] = source, low
                stack[size, 2], stack[size, 3] = min(end, run.start[source]), why
                size += 1
    return count


@compiled_loop
def _walk_all(run: Timeline, task: Integers, low: Integers, high: Integers, stages: int) -> tuple[Integers, Integers]:
    """Explain every gap; sum the parts by gap and account, and by stage at fault and account."""
    by_gap = np.zeros((len(task), len(WAITS)), np.int64)
    by_stage = np.zeros((stages, len(WAITS)), np.int64)
    parts = np.empty((64, 6), np.int64)
    for gap in range(len(task)):
        count = _walk(run, task[gap], low[gap], high[gap], parts)
        if count > len(parts):
            parts = np.empty((2 * count, 6), np.int64)
            count = _walk(run, task[gap], low[gap], high[gap], parts)
        for part in range(count):
            account, amount = parts[part, _ACCOUNT], parts[part, _AMOUNT]
            by_gap[gap, account] += amount
            by_stage[run.stage[parts[part, _TASK]], account] += amount
    return by_gap, by_stage


def explain_all(run: Timeline, task: Integers, low: Integers, high: Integers, stages: int) -> tuple[Integers, Integers]:
    """Book every gap of a run.

    Parameters
    ----------
    task : ndarray of int64, shape (gaps,)
        Position of the task that ends each gap.
    low, high : ndarray of int64, shape (gaps,)
        Begin and end of each gap [ns].
    stages : int
        How many stage names there are.

    Returns
    -------
    by_gap : ndarray of int64, shape (gaps, 5)
        Time per account of :data:`WAITS` [ns]; each row sums to the gap's length.
    by_stage : ndarray of int64, shape (stages, 5)
        The same sums by the stage of the task at fault [ns].
    """
    return _walk_all(run, task, low, high, stages)


def explain_one(run: Timeline, task: int, low: int, high: int) -> Integers:
    """The parts of one gap, in no particular order.

    Returns
    -------
    ndarray of int64, shape (parts, 6)
        Columns as in :data:`PART_COLUMNS`; the task as its position. The amounts sum to ``high - low``; it
        is less than end minus start only where a busy and an idle share of one interval are told apart.
    """
    parts = np.empty((64, 6), np.int64)
    count = _walk(run, task, low, high, parts)
    if count > len(parts):
        parts = np.empty((count, 6), np.int64)
        _walk(run, task, low, high, parts)
    return parts[:count]
