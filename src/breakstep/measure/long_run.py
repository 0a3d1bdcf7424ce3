"""A million tasks in one go: does the cost of a task, or the memory that it leaves behind, grow?

Four steps a cycle on a ring of 256 tiles, recorded. While the run goes on, the driver's look at the workers,
four times a second, also notes how much memory the workers' processes occupy. Growth is from the mean of the
first quarter of the run to the mean of the last, over the tasks in between. A record must grow; what its
tables hold a task is given beside, and a run of a quarter of the length without a record shows what else does.

Knows what Linux tells of a process. Refuses to know why memory grows.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from breakstep.engine.run import RunOptions
from breakstep.measure.bench import Bench, resident_bytes
from breakstep.measure.noop import Ring
from breakstep.profile.run import Profile
from breakstep.profile.schema import LAYOUTS

TILES, STAGES = 256, 4
CYCLES = 1000
WORKER_TABLES = ("tasks", "intervals", "counters", "transfers")  # edges are worked out by the driver afterwards


@dataclass(frozen=True)
class Sample:
    """Cycles completed, seconds since the run was called for, memory of all workers [bytes]."""

    cycles: int
    seconds: float
    memory: int


def long_figures(bench: Bench, cycles: int) -> dict[str, Any]:
    """Run it without a record for a quarter of the length, then whole and recorded, and say what it took."""
    bare, ring = (Ring((TILES,), n, stages=STAGES) for n in (max(4, cycles // 4), cycles))
    unrecorded: list[Sample] = []
    used = bench.run("resident", bare, RunOptions(record=False), sampler(bench, unrecorded))
    figures = {
        "unrecorded_tasks": bare.tasks,
        "unrecorded_cpu_us_per_task": 1e6 * used.cpu / bare.tasks,
        "unrecorded_worker_bytes_per_task": growth_per_task(unrecorded, bare),
    }
    return figures | _recorded(bench, ring)


def _recorded(bench: Bench, ring: Ring) -> dict[str, Any]:
    samples: list[Sample] = []
    began = time.perf_counter()
    used, profile = bench.record("resident", ring, RunOptions(), sampler(bench, samples))
    whole = time.perf_counter() - began
    return {
        "tasks": len(profile.tasks),
        "edges": len(profile.edges),
        "seconds": used.wall,
        "profile_seconds": whole - used.wall,
        "wall_us_per_task": 1e6 * used.wall / ring.tasks,
        "cpu_us_per_task": 1e6 * used.cpu / ring.tasks,
        "wall_us_by_quarter": wall_by_quarter(samples, ring),
        "worker_bytes_per_task": growth_per_task(samples, ring),
        "record_bytes_per_task": record_bytes(profile) / ring.tasks,
        "closure_error": profile.ledger.closure_error,
    }


def sampler(bench: Bench, samples: list[Sample]) -> Callable[[int], None]:
    """What a driver is to call with the number of completed cycles."""
    began = time.perf_counter()

    def note(done: int) -> None:
        memory = sum(resident_bytes(pid) for pid in bench.pids)
        samples.append(Sample(done, time.perf_counter() - began, memory))

    return note


def growth_per_task(samples: Sequence[Sample], ring: Ring) -> float | None:
    """Memory of the workers that each task left occupied [bytes]; None from a run too short to tell."""
    first = [s for s in samples if s.cycles <= 0.25 * ring.cycles]
    last = [s for s in samples if s.cycles >= 0.75 * ring.cycles]
    if not first or not last or not first[0].memory:
        return None
    cycles, memory = (
        float(np.mean([getattr(s, name) for s in last]) - np.mean([getattr(s, name) for s in first]))
        for name in ("cycles", "memory")
    )
    return memory / (cycles * ring.tasks / ring.cycles)


def wall_by_quarter(samples: Sequence[Sample], ring: Ring) -> list[float] | None:
    """Wall time of a task in each quarter of the run [us]; None from a run too short to tell."""
    if len(samples) < 8:  # two looks a quarter
        return None
    marks = np.linspace(samples[0].cycles, samples[-1].cycles, 5)
    moments = np.interp(marks, [s.cycles for s in samples], [s.seconds for s in samples])
    tasks = np.diff(marks) * ring.tasks / ring.cycles
    return [float(us) for us in 1e6 * np.diff(moments) / tasks]


def record_bytes(profile: Profile) -> float:
    """What the tables that workers keep hold, each row at its width [bytes]."""
    return sum(len(profile.frames[name]) * row_bytes(name) for name in WORKER_TABLES)


def row_bytes(table: str) -> float:
    """Width of a row [bytes]; words count as the numbers by which Arrow keeps them."""
    return sum(int(column.type.bit_width) for column in LAYOUTS[table].columns) / 8.0
