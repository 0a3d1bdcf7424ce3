"""Clocks: how the workers' clocks are aligned, how well, and how much CPU each process has used.

Processes that share a machine share its monotonic clock. For others the offset is taken from the exchange
with the shortest round trip out of several; it cannot be off by more than half of that, which is recorded
as the residual.
"""

from __future__ import annotations

import time
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from distributed import Client, Worker

from breakstep.engine.workers import run_on

# Round trips over one connection to a worker. On one host of two busy cores: shortest of 12 0.16-0.25 ms, of 50
# 0.15-0.17 ms, of 200 0.15-0.16 ms, whose middles were off by 0.001-0.03, 0.001 and 0.001 ms. 50 take 10-15 ms.
EXCHANGES = 50
FALLBACK_EXCHANGES = 12  # through the scheduler: 0.8 ms at best, whatever their number
OPERATION = "breakstep_clock"


@dataclass(frozen=True)
class ClockReading:
    """One worker's clock against ours.

    Attributes
    ----------
    offset : int
        What to add to our clock to get the worker's [ns]; 0 for the same clock.
    residual : int
        Most by which the offset can be wrong [ns]; 0 for the same clock.
    cpu : int
        CPU time the process has used so far [ns].
    """

    offset: int
    residual: int
    cpu: int


def clock() -> tuple[str, int]:
    """What tells this process's machine and boot, and the CPU time it has used [ns]."""
    return _boot(), time.process_time_ns()


def _boot() -> str:
    try:
        return Path("/proc/sys/kernel/random/boot_id").read_text(encoding="ascii").strip()
    except OSError:
        return ""


def now() -> int:
    """This process's clock [ns]; its zero is the machine's affair."""
    return time.perf_counter_ns()


def align(exchanges: Iterable[tuple[int, int, int]]) -> tuple[int, int]:
    """Offset and residual [ns] from exchanges: our clock before, theirs, ours after."""
    before, there, after = min(exchanges, key=lambda exchange: exchange[2] - exchange[0])
    return there - (before + after) // 2, (after - before + 1) // 2


def read_clocks(client: Client, addresses: list[str]) -> list[ClockReading]:
    """Clock readings of the workers at these addresses.

    Raises
    ------
    ClusterError, OSError
        One of them has gone.
    """
    here = _boot()
    answers = run_on(client, addresses, clock)
    readings = []
    for address in addresses:
        boot, cpu = answers[address]
        offset, residual = (0, 0) if boot and boot == here else align(_exchanges(client, address))
        readings.append(ClockReading(offset, residual, cpu))
    return readings


def drift(before: ClockReading, after: ClockReading) -> int:
    """Most by which a clock aligned at the beginning was wrong at any time up to the end [ns]."""
    return max(before.residual, abs(after.offset - before.offset) + after.residual)


def _exchanges(client: Client, address: str) -> list[tuple[int, Any, int]]:
    """Straight to the worker if it can be reached from here, or else through the scheduler."""
    from breakstep.engine.resident import adapter

    run_on(client, [address], _listen)
    try:
        found: list[tuple[int, Any, int]] = client.sync(adapter.exchange, client, address, OPERATION, EXCHANGES, now)
    except OSError:
        found = []
        for _ in range(FALLBACK_EXCHANGES):
            before = now()
            there = run_on(client, [address], now)[address]
            found.append((before, there, now()))
    return found


def _listen(dask_worker: Worker) -> None:
    from breakstep.engine.resident import adapter

    adapter.listen(dask_worker, _answer, OPERATION)


async def _answer() -> int:
    return now()
