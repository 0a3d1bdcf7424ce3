"""Efficiency factors as the trade publishes them: load balance, serialisation, transfer, and their product.

Source: the metrics of the Performance Optimisation and Productivity centre of excellence, in their multiplicative form,
https://co-design.pop-coe.eu/metrics. With useful time u_i of process i, run time T, and T_ideal the run time of the
same run on a network without latency and with infinite bandwidth:

    load balance       LB   = mean(u) / max(u)
    serialisation      SerE = max(u) / T_ideal
    transfer           TE   = T_ideal / T
    parallel           PE   = LB x SerE x TE = sum(u) / (P T)

Here a process is a worker thread, useful time is wall time in kernels (with or without a processor, so that it is the
time that others had to wait), and T_ideal is a replay: kernels keep their recorded times and their recorded order on
their thread, and wait for all their inputs, barriers included, but everything else (bytes, ghost zones, rims, the
dispatch) takes no time. So transfer efficiency is lost to bytes and dispatch together; the accounts tell them apart.

The order on each thread must be kept. A replay that may choose another order can take longer than the run itself did,
and a transfer efficiency above 1 would say nothing. With the order kept, T_ideal <= T holds for every run whose clocks
agree with its graph.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from breakstep.profile.causes import Timeline
from breakstep.profile.chain import previous_on_thread
from breakstep.profile.compiling import compiled_loop
from breakstep.profile.frames import Frames, Integers, integers, positions, sums_by
from breakstep.profile.inside import Inside


@dataclass(frozen=True)
class Factors:
    """The factors of one run, from four whole numbers; NaN where a factor has nothing to compare.

    Attributes
    ----------
    threads : int
        Worker threads, also those that ran nothing.
    useful_ns : int
        Time in kernels, all threads together [ns].
    busiest_ns : int
        Time in kernels of the thread that has most [ns].
    ideal_ns : int
        Run time when nothing but kernels takes time [ns]; 0 if tasks and threads contradict each other, as clocks that
        disagree can make them.
    span_ns : int
        Run time as recorded, from the first task's start to the last task's end [ns].
    """

    threads: int
    useful_ns: int
    busiest_ns: int
    ideal_ns: int
    span_ns: int

    @property
    def load_balance(self) -> float:
        """Mean useful time over the largest."""
        return _over(self.useful_ns, self.threads * self.busiest_ns)

    @property
    def serialisation(self) -> float:
        """Largest useful time over the ideal run time: what is lost to tasks waiting for each other."""
        return _over(self.busiest_ns, self.ideal_ns)

    @property
    def transfer(self) -> float:
        """Ideal run time over the real one: what is lost to bytes and dispatch."""
        return _over(self.ideal_ns, self.span_ns)

    @property
    def communication(self) -> float:
        """Serialisation times transfer: largest useful time over the real run time."""
        return _over(self.busiest_ns, self.span_ns)

    @property
    def parallel(self) -> float:
        """The product of all three: useful time over threads times run time."""
        return _over(self.useful_ns, self.threads * self.span_ns)


def _over(part: int, whole: int) -> float:
    return part / whole if whole else float("nan")


def factors_of(frames: Frames, run: Timeline, inside: Inside) -> Factors:
    """The factors of a run whose tables are sound."""
    threads = len(frames["threads"])
    useful = sums_by(inside.task[inside.kernel], (inside.end - inside.start)[inside.kernel], len(run.start))
    by_thread = sums_by(run.thread, useful, threads)
    span = int(run.end.max() - run.start.min()) if len(run.start) else 0
    busiest = int(by_thread.max(initial=0))
    return Factors(threads, int(by_thread.sum()), busiest, ideal_ns(frames, run, useful), span)


def ideal_ns(frames: Frames, run: Timeline, cost: Integers) -> int:
    """Run time when each task takes its cost and starts once its inputs and its thread's previous task are done [ns].

    Parameters
    ----------
    cost : ndarray of int64, shape (tasks,)
        [ns]

    Returns
    -------
    int
        0 if the tasks' order on their threads contradicts their edges.
    """
    numbers, edges = integers(frames["tasks"], "task"), frames["edges"]
    producer = positions(numbers, integers(edges, "producer"))
    consumer = positions(numbers, integers(edges, "consumer"))
    return int(_replayed(producer, consumer, previous_on_thread(run), cost))


@compiled_loop
def _replayed(producer: Integers, consumer: Integers, previous: Integers, cost: Integers) -> int:
    """Longest path through edges and threads, by Kahn's algorithm; 0 if some task is never free."""
    tasks = len(cost)
    first = np.zeros(tasks + 1, np.int64)
    waiting = np.zeros(tasks, np.int64)
    following = np.full(tasks, -1, np.int64)
    for edge in range(len(producer)):
        first[producer[edge] + 1] += 1
        waiting[consumer[edge]] += 1
    first = np.cumsum(first)
    place = first.copy()
    consumers = np.empty(len(producer), np.int64)
    for edge in range(len(producer)):
        consumers[place[producer[edge]]] = consumer[edge]
        place[producer[edge]] += 1
    for task in range(tasks):
        if previous[task] >= 0:
            following[previous[task]] = task
            waiting[task] += 1
    ready = np.zeros(tasks, np.int64)
    free = np.empty(tasks, np.int64)
    count, taken, span = 0, 0, 0
    for task in range(tasks):
        if waiting[task] == 0:
            free[count] = task
            count += 1
    while taken < count:
        task = free[taken]
        taken += 1
        done = ready[task] + cost[task]
        span = max(span, done)
        for edge in range(first[task], first[task + 1] + 1):
            after = consumers[edge] if edge < first[task + 1] else following[task]
            if after >= 0:
                ready[after] = max(ready[after], done)
                waiting[after] -= 1
                if waiting[after] == 0:
                    free[count] = after
                    count += 1
    return span if count == tasks else 0
