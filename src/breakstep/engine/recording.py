"""Turning what happened on a worker into the rows of a profile."""

from __future__ import annotations

import threading
import zlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from breakstep.engine.execute import Interval
from breakstep.graph.tasks import Task
from breakstep.profile.record import RunRecord
from breakstep.steps.step import Array


@dataclass
class Recorder:
    """Rows of the tasks that ran in this process, on a clock that starts at the run's origin.

    Parameters
    ----------
    worker : int
        Number of this worker.
    zero : int
        Reading of this process's clock at the run's origin [ns].
    """

    worker: int
    zero: int
    record: RunRecord = field(default_factory=RunRecord)
    arrived: list[tuple[Any, ...]] = field(default_factory=list)
    _threads: dict[int, int] = field(default_factory=dict)
    _listed: set[int] = field(default_factory=set)
    _lock: threading.Lock = field(default_factory=threading.Lock)

    def task(
        self,
        row: TaskRow,
        start: int,
        end: int,
        output_bytes: int = 0,
        skipped: bool = False,
        thread: int | None = None,
    ) -> None:
        """One task, with start and end in this process's own clock; the calling thread's unless one is named."""
        number = self.thread() if thread is None else thread
        self.record.tasks.append(
            (
                *(row.number, row.kind, row.stage, row.tile, row.cycle, row.iteration),
                *(self.worker, number, start - self.zero, end - self.zero, output_bytes, skipped),
            )
        )

    def intervals(self, number: int, intervals: Sequence[Interval]) -> None:
        """What the task's time was spent on."""
        self.record.intervals.extend(
            (number, i.what, i.step, i.start - self.zero, i.end - self.zero, i.cpu) for i in intervals
        )

    def counters(self, number: int, counters: Sequence[tuple[str, str, int]]) -> None:
        """Work counters that kernels reported."""
        self.record.counters.extend((number, step, name, value) for step, name, value in counters)

    def checksums(self, number: int, step: str, arrays: Mapping[str, Array]) -> None:
        """A checksum of each array a task made, for finding where two runs part."""
        self.record.counters.extend(
            (number, step, f"checksum:{name}", zlib.crc32(array.tobytes())) for name, array in arrays.items()
        )

    def thread(self) -> int:
        """Number of the calling thread, in order of appearance."""
        ident = threading.get_ident()
        with self._lock:
            if ident not in self._threads:
                self._threads[ident] = len(self._threads)
                self._listed.add(self._threads[ident])
                self.record.threads.append((self.worker, self._threads[ident]))
            return self._threads[ident]

    def name_thread(self, number: int) -> None:
        """Give the calling thread a number of the caller's choice."""
        with self._lock:
            self._threads[threading.get_ident()] = number
            self._listed.add(number)
            self.record.threads.append((self.worker, number))

    def arrival(
        self, key: Any, name: str, sender: int, size: int, spent: tuple[int, int], sent: int, arrived: int
    ) -> None:
        """An item from another worker: what it is, how large, time for packing and unpacking, and when.

        ``sent`` stays in the sender's clock; ``arrived`` is put on the run's.
        """
        self.arrived.append((key, name, sender, size, *spent, sent, arrived - self.zero))

    def complete_threads(self, threads: int) -> None:
        """Add rows for threads that ran nothing."""
        for thread in set(range(threads)) - self._listed:  # not by idents: a thread may get that of one that has ended
            self._listed.add(thread)
            self.record.threads.append((self.worker, thread))


@dataclass(frozen=True)
class TaskRow:
    """The part of a task's row that is known before it runs."""

    number: int
    kind: str
    stage: str
    tile: int
    cycle: int
    iteration: int


def task_row(task: Task) -> TaskRow:
    """The row of a task as far as the graph knows it."""
    phase = task.phase
    return TaskRow(task.number, str(task.kind), task.label, task.tile, phase.cycle, phase.iteration)


def record_edges(record: RunRecord, tasks: Sequence[Task]) -> None:
    """Every edge of these tasks; the initial state (numbers below 0) is not a task."""
    for task in tasks:
        record.edges.extend((producer, task.number, str(kind)) for producer, kind in task.edges() if producer >= 0)
