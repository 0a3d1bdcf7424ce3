"""Clocks: how the workers' clocks are aligned, how well, and how much CPU each process has used.

Processes that share a machine share its monotonic clock. For others the offset is taken from the exchange
with the shortest round trip out of several; it cannot be off by more than half of that, which is recorded
as the residual.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

EXCHANGES = (
    12  # round trips a worker; the shortest of 12 came within 10 % of the shortest of 50 on one machine
)


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


def clock() -> tuple[int, str, int]:
    """This process's clock [ns], what tells its machine and boot, and the CPU time it has used [ns]."""
    try:
        boot = Path("/proc/sys/kernel/random/boot_id").read_text(encoding="ascii").strip()
    except OSError:
        boot = ""
    return time.perf_counter_ns(), boot, time.process_time_ns()


def read_clock(ask: Callable[[], Any]) -> ClockReading:
    """Compare a remote clock, which ``ask`` reads by running :func:`clock` there, with ours."""
    _, here, _ = clock()
    best: tuple[int, int, int] | None = None
    for _ in range(EXCHANGES):
        before = time.perf_counter_ns()
        there, boot, cpu = ask()
        after = time.perf_counter_ns()
        if boot and boot == here:
            return ClockReading(0, 0, cpu)
        trip = after - before
        if best is None or trip < best[0]:
            best = (trip, there - (before + after) // 2, cpu)
    assert best is not None
    return ClockReading(best[1], best[0] // 2, best[2])


def read_clocks(client: Any, addresses: list[str]) -> list[ClockReading]:
    """Clock readings of the workers at these addresses."""
    return [
        read_clock(lambda address=address: client.run(clock, workers=[address])[address])  # type: ignore[misc]
        for address in addresses
    ]
