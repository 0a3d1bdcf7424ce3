"""What a replay found: when each task ran, where, and where the machine's time went."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from breakstep.forecast.graph import STEP, Int32s, Int64s, ReplayGraph
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


def accounted(
    graph: ReplayGraph,
    machine: MachineModel,
    times: tuple[Int64s, Int64s],
    slot: Int32s,
    order: Int32s,
    traffic: tuple[Int64s, int],
) -> Replay:
    """Add up where the time went.

    Idle time is what is left: the engines never run two tasks on one thread at once, which tests check.
    """
    start, finish = times
    steps = graph.kind == STEP
    worker = slot[steps] // machine.threads
    makespan = int(finish[steps].max(initial=0))
    busy = np.zeros(machine.workers, dtype=np.int64)
    np.add.at(busy, worker, graph.duration_ns[steps])
    overhead = np.bincount(worker, minlength=machine.workers).astype(np.int64) * machine.overhead_ns
    idle = machine.threads * makespan - busy - overhead
    return Replay(makespan, start, finish, slot, order, busy, overhead, idle, traffic[0], traffic[1])
