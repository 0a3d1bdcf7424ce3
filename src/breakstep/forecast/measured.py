"""What a recorded run says about the machine and the dispatch it ran on.

Every figure comes from the run itself where the run can tell. A run of one worker sends no message, so that what
messages cost cannot come from it; then the figures of :data:`UNSEEN` stand in, and the forecast says so.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from breakstep.forecast.lift import Lifted
from breakstep.forecast.model import MachineModel
from breakstep.profile.frames import Integers, integers, positions


@dataclass(frozen=True)
class Dispatch:
    """What the dispatch costs on a node with idle cores.

    Attributes
    ----------
    overhead_ns : float
        Between two tasks of one thread when the second was ready, while no messages come and go [ns].
    message_ns : float
        From the end of a task to the moment its message can be used elsewhere [ns].
    hop_ns : float
        One level of a barrier's or reduction's tree, one way, among many workers [ns].
    local_turn_ns : float
        From the last task of a phase to the first behind its barrier with one worker, less the overhead [ns].
    message_cpu_ns : float
        Processor time that a transfer takes from its sender and receiver together, beside their tasks [ns].
    ps_per_byte : float
        Inverse bandwidth [ps/byte].
    shared : float
        How much slower kernels are on a processor whose neighbours are all busy, less 1: caches and memory
        are shared.
    python : float
        How many times as long the parts of a task that hold the interpreter take while messages come and go.
    seen : bool
        Whether messages were recorded.
    """

    overhead_ns: float
    message_ns: float
    hop_ns: float
    local_turn_ns: float
    message_cpu_ns: float
    ps_per_byte: float
    shared: float
    python: float
    seen: bool


#: Measured with the resident dispatch on two cores of a shared virtual machine, three runs each of ember_field,
#: quiet_gas and single_spark in both modes with one and with two workers; medians over all of them. Between one worker
#: and two, kernels took 4 to 9 % more processor time (9 where both were busy all the time), and ghost zones, checks
#: and gaps 1.7 to 2.6 times as long.
UNSEEN = Dispatch(
    overhead_ns=50e3,
    message_ns=1.6e6,
    hop_ns=1.4e6,
    local_turn_ns=0.2e6,
    message_cpu_ns=0.7e6,
    ps_per_byte=1000.0,
    shared=0.09,
    python=2.1,
    seen=False,
)


def dispatch_of(runs: Sequence[Lifted]) -> Dispatch:
    """The dispatch as the runs saw it, each figure the median over those that show it."""
    seen = [run for run in runs if len(run.profile.transfers)]
    locked = [run for run in runs if run.is_lockstep]
    found = {
        "overhead_ns": [overhead_ns(run) / (UNSEEN.python if run.workers > 1 else 1.0) for run in runs],
        "message_ns": [message_ns(run) for run in seen],
        "hop_ns": [hop_ns(run) for run in locked if run.workers > 1],
        "local_turn_ns": [max(turn_ns(run) - overhead_ns(run), 0.0) for run in locked if run.workers == 1],
        "message_cpu_ns": [message_cpu_ns(run) for run in seen],
    }
    if seen and not found["hop_ns"]:
        found["hop_ns"] = found["message_ns"]
    medians = {name: float(np.median(values)) for name, values in found.items() if values}
    return replace(UNSEEN, seen=bool(seen), **medians)


def hop_ns(run: Lifted) -> float:
    """One level of the tree, one way, from the turns at barriers.

    The last to arrive is the root itself once in so many workers, and then one way is saved.
    """
    turn = max(turn_ns(run) - overhead_ns(run), 0.0)
    depth = MachineModel(run.workers).tree_depth
    return turn / (2.0 * depth * (1.0 - 1.0 / run.workers))


def overhead_ns(run: Lifted) -> float:
    """Mean gap before a task whose inputs were there when its thread became free [ns].

    Where barriers are, gaps inside a phase show it; those between phases belong to the turn.
    """
    inside = gaps_inside_phases(run) if run.is_lockstep else np.empty(0)
    if len(inside):
        return float(inside.mean())
    gaps = run.profile.ledger.gaps
    length = integers(gaps, "end_ns") - integers(gaps, "start_ns")
    pure = integers(gaps, "engine") == length
    return float(length[pure].mean()) if np.any(pure) else UNSEEN.overhead_ns


def gaps_inside_phases(run: Lifted) -> Integers:
    """Gaps between two tasks of one phase that one thread ran one after the other [ns]."""
    phase = np.repeat(np.arange(run.phases), run.tiles)
    thread, start = (run.worker * run.threads + run.thread).reshape(-1), run.start.reshape(-1)
    order = np.lexsort((start, phase, thread))
    same = (np.diff(thread[order]) == 0) & (np.diff(phase[order]) == 0)
    return np.asarray((start[order][1:] - run.end.reshape(-1)[order][:-1])[same])


def message_ns(run: Lifted) -> float:
    """Mean time from the end of a task to the arrival of what it sent [ns]."""
    profile = run.profile
    moved, tasks = profile.transfers, profile.tasks
    sender = positions(integers(tasks, "task"), integers(moved, "producer"))
    made = integers(tasks, "end_ns")[sender]
    return float(np.maximum(integers(moved, "arrived_ns") - made, 0).mean())


def turn_ns(run: Lifted) -> float:
    """Mean time from the end of a phase to each worker's first task behind its barrier [ns]."""
    ended = run.end.max(axis=1)[:-1]
    workers = np.unique(run.worker)
    waited = []
    for worker in workers:
        start = np.where(run.worker == worker, run.start, np.iinfo(np.int64).max).min(axis=1)[1:]
        has_work = start < np.iinfo(np.int64).max
        waited.append((start - ended)[has_work])
    return float(np.concatenate(waited).mean()) if len(ended) else 0.0


def message_cpu_ns(run: Lifted) -> float:
    """Processor time of worker processes that no task's thread accounts for, a transfer [ns]."""
    used = run.profile.manifest["notes"].get("worker_cpu_ns")
    if not used:
        return UNSEEN.message_cpu_ns
    beside = float(sum(used)) - thread_cpu_ns(run)
    # A worker that did other things in the same process, such as compiling, shows more than messages can cost.
    return float(np.clip(beside / max(len(run.profile.transfers), 1), 0.0, 2.0 * UNSEEN.message_cpu_ns))


def thread_cpu_ns(run: Lifted) -> float:
    """Processor time on task threads: kernels and ghost zones as noted [ns].

    Of the rest and the gaps only the time that passed is known; in it a thread has the interpreter, and with it a
    processor, for the share that is left when messages come and go.
    """
    costs = run.costs
    noted = sum(float(cpu.sum()) for cpu in costs.cpu.values()) + float((costs.halo_cpu + costs.pack_cpu).sum())
    passed = float(costs.rest.sum()) + run.start.size * overhead_ns(run)
    return noted + passed / (UNSEEN.python if run.workers > 1 else 1.0)
