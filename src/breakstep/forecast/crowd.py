"""Crowding: how much slower tasks run when the cores of a node are all in use.

Three effects, each found in runs with one and with two workers on two cores (figures at
:data:`breakstep.forecast.measured.UNSEEN`):

- neighbours share caches and memory: kernels slow down in proportion to how many of the other cores are busy;
- messages need a processor too: where no core is spare they take it from a task;
- more threads than cores share them.

All three are mean values over a run, worker by worker: a worker whose neighbour is idle half of the time is slowed
down half as much. Nothing here knows when what happens.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from breakstep.forecast.measured import Dispatch
from breakstep.forecast.program import Floats


@dataclass(frozen=True)
class Load:
    """How busy a machine is.

    Attributes
    ----------
    busy : ndarray of float64, shape (workers,)
        Share of the time in which each worker's threads are in a task.
    threads, cores, nodes : int
        Threads of a worker, cores of a node, nodes in use.
    work_ns : float
        Time in tasks were it not crowded, all threads together [ns].
    messages : float
        Transfers.
    """

    busy: Floats
    threads: int
    cores: int
    nodes: int
    work_ns: float
    messages: float


def kernel_stretch(load: Load, dispatch: Dispatch) -> Floats:
    """How many times as long a kernel takes on each worker as on an idle machine, shape (workers,)."""
    slots = load.threads * len(load.busy)
    on_node = -(-slots // load.nodes)
    others = max(load.cores - 1, 1)
    around = (load.threads * load.busy.sum() - load.busy) / max(slots - 1, 1)  # mean over all other threads
    shared = 1.0 + dispatch.shared * around * min(on_node - 1, others) / others
    beside = dispatch.message_cpu_ns * load.messages / max(load.work_ns, 1.0)
    taken = around**others if on_node >= load.cores else np.zeros_like(around)
    crowded = max(1.0, float(load.busy.mean()) * on_node / load.cores)
    return np.asarray(shared * (1.0 + beside * taken) * crowded)


def python_stretch(workers: int, dispatch: Dispatch) -> float:
    """How many times as long the interpreter's part of a task takes as without messages."""
    return dispatch.python if workers > 1 else 1.0
