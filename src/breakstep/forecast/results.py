"""What a replay found: when each task ran, where, and where the machine's time went."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from breakstep.errors import ForecastError
from breakstep.forecast.graph import Int32s, Int64s, ReplayGraph
from breakstep.forecast.model import MachineModel


@dataclass(frozen=True)
class Replay:
    """One played graph.

    Parameters
    ----------
    makespan_ns : int
        End of the last step task, counted from 0 [ns].
    start_ns, finish_ns : ndarray of int64, shape (tasks,)
        Moment the thread takes a task up (its overhead begins), and moment it is done [ns]. Of a control node:
        when its last input was there, and when it released. With free placement a thread fetches
        a task's inputs before ``start_ns``.
    slot : ndarray of int32, shape (tasks,)
        Thread that ran it, ``worker * threads + thread``; -1 for control nodes.
    order : ndarray of int32, shape (tasks,)
        Tasks in the order in which they finished, ties settled: a topological order of data, threads and messages.
    busy_ns, overhead_ns, idle_ns : ndarray of int64, shape (workers,)
        They sum to threads x makespan for each worker [ns].
    received_bytes : ndarray of int64, shape (workers,)
        What came from other workers [bytes].
    messages : int
        How many edges crossed from worker to worker.
    """

    makespan_ns: int
    start_ns: Int64s
    finish_ns: Int64s
    slot: Int32s
    order: Int32s
    busy_ns: Int64s
    overhead_ns: Int64s
    idle_ns: Int64s
    received_bytes: Int64s
    messages: int


@dataclass(frozen=True)
class Counts:
    """What the engines count while they play, per worker; arrays of int64 that they add to."""

    busy_ns: Int64s
    started: Int64s
    received_bytes: Int64s
    messages: Int64s

    @classmethod
    def none(cls, workers: int) -> Counts:
        """All zero."""
        return cls(*(np.zeros(workers, dtype=np.int64) for _ in range(4)))


def replay_of(
    graph: ReplayGraph,
    machine: MachineModel,
    times: tuple[Int64s, Int64s],
    slot: Int32s,
    order: Int32s,
    counts: Counts,
) -> Replay:
    """Add up where the time went.

    Idle time is what is left of the threads' time: the engines run one task at a time on a thread.

    Raises
    ------
    ForecastError
        Some tasks could not run, because they wait for each other.
    """
    start, finish = times
    if len(order) < graph.tasks:
        raise ForecastError(
            f"{graph.tasks - len(order)} of {graph.tasks} tasks wait for each other, so the schedule cannot be played."
        )
    makespan = int(finish[graph.on_worker].max(initial=0))
    overhead = counts.started * machine.overhead_ns
    idle = machine.threads * makespan - counts.busy_ns - overhead
    received, messages = counts.received_bytes, int(counts.messages.sum())
    return Replay(makespan, start, finish, slot, order, counts.busy_ns, overhead, idle, received, messages)
