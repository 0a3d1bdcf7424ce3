"""How many bytes of arrays a worker holds at most in a replay.

An output lives on its worker from the start of its task to the end of its last reader there (or of its task, when
all readers are elsewhere); one that nobody reads is a result and stays to the end. What crosses lives on the
reader's worker from the end of its producer to the end of its reader. At one moment, what ends goes first.
"""

from __future__ import annotations

import numpy as np

from breakstep.forecast.graph import DATA, STEP, Int64s, ReplayGraph
from breakstep.forecast.model import MachineModel
from breakstep.forecast.results import Replay


def high_water(graph: ReplayGraph, machine: MachineModel, replay: Replay) -> Int64s:
    """Most bytes alive at once on each worker, shape (workers,)."""
    data = graph.edge_kind == DATA
    ends = graph.producer[data], graph.consumer[data]
    worker = np.where(graph.kind == STEP, replay.slot // machine.threads, -1)
    local = worker[ends[0]] == worker[ends[1]]
    read = np.bincount(ends[0], minlength=graph.tasks) > 0
    until = np.where(read, replay.finish_ns, max(replay.makespan_ns, 1) + 1)
    np.maximum.at(until, ends[0][local], replay.finish_ns[ends[1][local]])
    steps = graph.on_worker
    copied = graph.edge_bytes[data][~local].astype(np.int64)
    sizes = np.concatenate([graph.output_bytes[steps], copied])
    begin = np.concatenate([replay.start_ns[steps], replay.finish_ns[ends[0][~local]]])
    end = np.concatenate([until[steps], replay.finish_ns[ends[1][~local]]])
    where = np.concatenate([worker[steps], worker[ends[1][~local]]])
    return _highest(machine.workers, where, begin, end, sizes)


def _highest(workers: int, where: Int64s, begin: Int64s, end: Int64s, sizes: Int64s) -> Int64s:
    """Highest level reached by intervals [begin, end) of given sizes on each worker."""
    change = np.concatenate([sizes, -sizes])
    order = np.lexsort((change, np.concatenate([begin, end]), np.tile(where, 2)))
    level = np.cumsum(change[order])  # every worker's changes sum to 0, so each begins at 0
    highest = np.zeros(workers, dtype=np.int64)
    np.maximum.at(highest, np.tile(where, 2)[order], level)
    return highest
