"""A local cluster to measure on: both dispatches, and what its processes consume.

CPU time is that of whole processes: of the workers with their event loops, and of this process, in which the
scheduler, the client and the workers' nannies live. What Dask's daemons consume when nothing runs is measured
apart and taken off. Every run's answer is compared with what it must be.

Knows processes and runs. Refuses to know what a figure is good for.
"""

from __future__ import annotations

import contextlib
import os
import resource
import tempfile
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from breakstep.engine.clocks import read_clocks
from breakstep.engine.cluster import local_cluster
from breakstep.engine.native import NativeDispatch
from breakstep.engine.program import Program
from breakstep.engine.recorded import run_and_record
from breakstep.engine.resident import ResidentDispatch
from breakstep.engine.run import Progress, RunOptions, RunResult
from breakstep.measure.noop import FIELD, Ring
from breakstep.profile.run import Profile

DISPATCHES = ("native", "resident")


@dataclass(frozen=True)
class Usage:
    """Time that passed, and CPU time that processes used meanwhile [s]."""

    wall: float
    client: float
    workers: float

    @property
    def cpu(self) -> float:
        """CPU time of all processes [s]."""
        return self.client + self.workers

    def __sub__(self, other: Usage) -> Usage:
        return Usage(self.wall - other.wall, self.client - other.client, self.workers - other.workers)

    def scaled(self, factor: float) -> Usage:
        """Everything times a factor."""
        return Usage(self.wall * factor, self.client * factor, self.workers * factor)

    def without_idle(self, idle: Usage) -> Usage:
        """Less what idle daemons use over the same time; the time itself stays."""
        share = idle.scaled(self.wall / idle.wall)
        return Usage(self.wall, self.client - share.client, self.workers - share.workers)


class Bench:
    """A cluster of worker processes and what can be measured on it.

    Parameters
    ----------
    client : distributed.Client
    idle_seconds : float
        How long to watch the cluster idle.
    """

    def __init__(self, client: Any, idle_seconds: float) -> None:
        self.client = client
        native, resident = NativeDispatch(client), ResidentDispatch(client)
        self.dispatches: dict[str, NativeDispatch | ResidentDispatch] = {"native": native, "resident": resident}
        self.addresses, self.workers, self.threads = native.addresses, native.workers, native.threads
        self.pids: list[int] = list(client.run(os.getpid).values())
        self.idle = Usage(1.0, 0.0, 0.0)
        self._warm_up()
        self.idle = self._watch_idle(idle_seconds)

    @property
    def slots(self) -> int:
        """Threads of all workers."""
        return self.workers * self.threads

    def usage(self) -> Usage:
        """Readings of all clocks now."""
        workers = sum(reading.cpu for reading in read_clocks(self.client, self.addresses)) * 1e-9
        return Usage(time.perf_counter(), time.process_time(), workers)

    def _warm_up(self) -> None:
        """The first runs on a cluster import modules and look up how arrays are to be sent: 0.3 s of CPU time."""
        for dispatch in self.dispatches:
            self.run(dispatch, Ring((4 * self.workers,), 3, components=16), RunOptions(placement="cyclic"))

    def _watch_idle(self, seconds: float) -> Usage:
        before = self.usage()
        time.sleep(seconds)
        return self.usage() - before

    def run(self, dispatch: str, ring: Ring, options: RunOptions, progress: Progress | None = None) -> Usage:
        """Run once; what it used, less the idle daemons.

        Raises
        ------
        BreakstepError
            The run failed, or its answer is wrong.
        """
        metered = Metered(self, dispatch)
        _settle(metered.run(Program(ring.problem(), ring.tile_shape), options, progress), ring)
        return metered.used

    def record(
        self, dispatch: str, ring: Ring, options: RunOptions, progress: Progress | None = None
    ) -> tuple[Usage, Profile]:
        """Run once and make the profile, as every recorded run does, in a folder that is then removed.

        Raises
        ------
        BreakstepError
            The run failed, or its answer is wrong.
        """
        metered = Metered(self, dispatch)
        program = Program(ring.problem(), ring.tile_shape)
        facts = {"name": program.problem.name, "title": program.problem.title}
        mode = "lockstep" if options.barriers else "tasked"
        with tempfile.TemporaryDirectory(prefix="breakstep-") as folder:
            result, profile = run_and_record(
                metered, program, options, Path(folder) / mode, mode=mode, scenario=facts, progress=progress
            )
            _settle(result, ring)
            _ = profile.ledger  # made from the tables, which are read from the folder
        return metered.used, profile


class Metered:
    """A dispatch that notes what each run used; warming up does not count."""

    def __init__(self, bench: Bench, dispatch: str) -> None:
        self.bench, self.inner = bench, bench.dispatches[dispatch]
        self.name, self.workers, self.threads = self.inner.name, self.inner.workers, self.inner.threads
        self.used = Usage(0.0, 0.0, 0.0)

    def run(self, program: Program, options: RunOptions, progress: Progress | None = None) -> RunResult:
        """Run a program; errors and interrupts end up in the result."""
        with self.bench.client.as_current():  # waiting for futures goes through the current client
            return self._run(program, options, progress)

    def _run(self, program: Program, options: RunOptions, progress: Progress | None) -> RunResult:
        self.inner.prepare(program)
        before = self.bench.usage()
        result = self.inner.run(program, options, progress)
        self.used = (self.bench.usage() - before).without_idle(self.bench.idle)
        return result


def _settle(result: RunResult, ring: Ring) -> None:
    if result.failure is not None:
        raise result.failure
    if result.interrupted:
        raise KeyboardInterrupt
    ring.check(result.fields[FIELD])


@contextlib.contextmanager
def open_bench(workers: int, threads: int, idle_seconds: float) -> Iterator[Bench]:
    """A cluster to measure on for as long as the context lasts."""
    with local_cluster(workers, threads) as client:
        yield Bench(client, idle_seconds)


def resident_bytes(pid: int) -> int:
    """Memory that a process occupies [bytes]; 0 where Linux does not tell."""
    try:
        lines = Path(f"/proc/{pid}/status").read_text("ascii").splitlines()
    except OSError:
        return 0
    return next((1024 * int(line.split()[1]) for line in lines if line.startswith("VmRSS:")), 0)


@dataclass(frozen=True)
class Machine:
    """Readings of the whole machine: when, how long its cores were busy, and how long with our work [s]."""

    wall: float
    busy: float | None
    ours: float

    @classmethod
    def now(cls) -> Machine:
        """Read them; our work includes processes that have ended, and not those that run still."""
        ended = resource.getrusage(resource.RUSAGE_CHILDREN)
        return cls(time.perf_counter(), _busy_seconds(), time.process_time() + ended.ru_utime + ended.ru_stime)

    def others_since(self, before: Machine) -> float | None:
        """Cores that other programs kept busy in between, on average; None where Linux does not tell."""
        if self.busy is None or before.busy is None:
            return None
        others = (self.busy - before.busy) - (self.ours - before.ours)
        return max(0.0, others / (self.wall - before.wall))


def _busy_seconds() -> float | None:
    """Time that the cores we may use were not idle since the machine started, time stolen by its host included."""
    try:
        lines = Path("/proc/stat").read_text("ascii").splitlines()
    except OSError:
        return None
    usable = {f"cpu{number}" for number in os.sched_getaffinity(0)}  # there, where /proc/stat is
    ticks = 0
    for line in lines:
        name, *fields = line.split()
        if name in usable:  # user, nice, system, idle, iowait, irq, softirq, steal; guests are within user
            counts = [int(field) for field in fields[:8]]
            ticks += sum(counts) - counts[3] - counts[4]
    return ticks / os.sysconf("SC_CLK_TCK")
