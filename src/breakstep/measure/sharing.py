"""Threads of one process or processes of one thread: which keeps the cores in kernels, and when.

Kernels that release the interpreter's lock, and kernels that hold it, of a few lengths, on as many threads in
one worker as there are workers otherwise. The figure is the CPU time of kernels over the time of all threads:
a kernel that waits for the lock, or for a core, does not count as working.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from breakstep.engine.run import RunOptions
from breakstep.measure.bench import Bench
from breakstep.measure.cost import spread
from breakstep.measure.noop import Pace, Ring
from breakstep.measure.timing import in_turn

TILES = 32
FEWEST_CYCLES = 3


def sharing_rows(
    benches: Mapping[str, Bench], lengths: Sequence[float], pace: Pace, rounds: int, seconds: float
) -> list[dict[str, Any]]:
    """One row for each kind of kernel and length, with the share of each bench in percent.

    Parameters
    ----------
    benches : mapping of str to Bench
        Clusters with equally many threads, by what they are called.
    lengths : sequence of float
        [ms]
    seconds : float
        How long a run should keep each thread busy.
    """
    rows = []
    for holds_lock in (False, True):
        for length in lengths:
            found = _in_turn(benches, length, holds_lock, pace, rounds, seconds)
            rows.append({"holds_lock": holds_lock, "task_ms": length, **found})
    return rows


def _in_turn(
    benches: Mapping[str, Bench], length: float, holds_lock: bool, pace: Pace, rounds: int, seconds: float
) -> dict[str, dict[str, float]]:
    shares: dict[str, list[float]] = {name: [] for name in benches}
    for number in range(rounds):
        for name in in_turn(benches, number):
            bench = benches[name]
            cycles = max(FEWEST_CYCLES, round(1e3 * seconds * bench.slots / (length * TILES)))
            ring = Ring((TILES,), cycles, kernel=pace.busy(length, holds_lock))
            shares[name].append(_kernel_percent(bench, ring))
    return {name: spread(found) for name, found in shares.items()}


def _kernel_percent(bench: Bench, ring: Ring) -> float:
    _, profile = bench.record("resident", ring, RunOptions())
    return 100.0 * float(profile.work["cpu_seconds"].sum()) / (1e-9 * profile.ledger.available_ns)
