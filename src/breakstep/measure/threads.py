"""Two threads of one process against two processes: does the interpreter's lock cost anything?

Both crews obey the same loop over the same kind of pipe, so that all that differs is what the members
share. Members prepare their work, compiling and loading included, before any clock runs; then each does the
same number of calls on data of its own, and the time from the order to the last answer counts. It is
wall-clock time, since waiting for a lock takes none of the processor's.

Knows crews and their pace. Refuses to know what the work computes.
"""

from __future__ import annotations

import contextlib
import multiprocessing
import threading
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from multiprocessing.connection import Connection

from breakstep.errors import BreakstepError
from breakstep.measure.burning import burn_work
from breakstep.measure.hydro import sweep_work
from breakstep.measure.limits import cores
from breakstep.measure.timing import Effort, Row, Work, enough_calls, in_turn, ratio
from breakstep.measure.transport import relax_work

MEMBERS = 2
NEEDED = 0.9  # of the pace of processes that threads must reach; a loop in plain Python reaches 0.52
GAIN = 1.5  # of two processes over one: below it, two cores were not free, and the ratio says nothing of locks
_WINDOW = 6.0  # a turn lasts this many times the shortest measurement: orders by pipe take 0.1 ms
HOT = 3e9  # [K]


def hot_burn_work() -> Work:
    """Burn hot zones."""
    return burn_work(HOT)


JOBS: Mapping[str, Callable[[], Work]] = {
    "hydro sweep": sweep_work,
    "transport relaxation": relax_work,
    "burning": hot_burn_work,
}


def serve(orders: Connection) -> None:
    """One member: take (job, calls) off the pipe and answer when done, until told None."""
    prepared: dict[str, Work] = {}
    with orders:
        while (order := orders.recv()) is not None:
            job, calls = order
            if job not in prepared:
                prepared[job] = JOBS[job]()
            for _ in range(calls):
                prepared[job]()
            orders.send(job)


def wall_seconds(crew: Sequence[Connection], job: str, calls: int) -> float:
    """Time until every member of the crew has called the job that often.

    Raises
    ------
    BreakstepError
        A member ended early.
    """
    started = time.perf_counter()
    try:
        for member in crew:
            member.send((job, calls))
        for member in crew:
            member.recv()
    except (EOFError, OSError) as error:
        raise BreakstepError(f"a thread or process that was to measure {job} ended early") from error
    return time.perf_counter() - started


@contextlib.contextmanager
def thread_crew(members: int) -> Iterator[list[Connection]]:
    """Threads of this process that serve for as long as the context lasts."""
    pipes = [multiprocessing.Pipe() for _ in range(members)]
    staff = [threading.Thread(target=serve, args=(theirs,), daemon=True) for _, theirs in pipes]
    for thread in staff:
        thread.start()
    crew = [ours for ours, _ in pipes]
    try:
        yield crew
    finally:
        _dismiss(crew)
        for thread in staff:
            thread.join()


@contextlib.contextmanager
def process_crew(members: int) -> Iterator[list[Connection]]:
    """New processes that serve for as long as the context lasts."""
    context = multiprocessing.get_context("spawn")
    pipes = [context.Pipe() for _ in range(members)]
    staff = [context.Process(target=serve, args=(theirs,), daemon=True) for _, theirs in pipes]
    for process, (_, theirs) in zip(staff, pipes, strict=True):
        process.start()
        theirs.close()  # the process has its own copy; without ours, its end ends the pipe
    crew = [ours for ours, _ in pipes]
    try:
        yield crew
    finally:
        _dismiss(crew)
        for process in staff:
            process.join()


def _dismiss(crew: Sequence[Connection]) -> None:
    for member in crew:
        with contextlib.suppress(OSError):
            member.send(None)


def thread_rows(effort: Effort) -> list[Row]:
    """Calls a second by two threads and by two processes, and how the paces compare, for each job."""
    calls = {job: _calls(prepare(), effort) for job, prepare in JOBS.items()}
    with process_crew(MEMBERS) as processes, thread_crew(MEMBERS) as threads:
        return [_row(job, calls[job], effort, processes, threads) for job in JOBS]


def _calls(work: Work, effort: Effort) -> int:
    """Also compiles here what the processes then find in the cache."""
    work()
    return enough_calls(work, _WINDOW * effort.shortest, time.perf_counter)


def _row(job: str, calls: int, effort: Effort, processes: Sequence[Connection], threads: Sequence[Connection]) -> Row:
    crews = {"processes": processes, "threads": threads, "alone": processes[:1]}
    samples = crew_turns(crews, job, calls, effort)
    pace = {name: len(crews[name]) * calls / min(seconds) for name, seconds in samples.items()}
    speed_up = MEMBERS * ratio(samples, "alone", "processes").median
    return Row(
        job,
        pace["threads"],
        pace["processes"],
        ratio(samples, "processes", "threads"),
        NEEDED,
        judged=cores() >= MEMBERS and speed_up >= GAIN,
        details={"calls": calls, "two_processes_over_one": speed_up},
    )


def crew_turns(
    crews: Mapping[str, Sequence[Connection]], job: str, calls: int, effort: Effort
) -> dict[str, list[float]]:
    """Wall-clock seconds of each crew, one figure a round; every second round in the opposite order."""
    for crew in crews.values():
        wall_seconds(crew, job, 1)
    samples: dict[str, list[float]] = {name: [] for name in crews}
    for number in range(effort.rounds):
        for name in in_turn(crews, number):
            samples[name].append(wall_seconds(crews[name], job, calls))
    return samples
