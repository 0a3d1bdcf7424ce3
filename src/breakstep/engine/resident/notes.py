"""The record that one worker of a resident run keeps.

Tasks are numbered here exactly as the driver numbers them afterwards, from the phases alone. Nodes of
trees, counters and releases do their work in no time worth measuring, in the event loop or in a thread
that has just finished a task; they are entered as moments. Only the roots of trees call functions of the user's:
they are entered with the time that they took.
"""

from __future__ import annotations

import threading
import time
from typing import TYPE_CHECKING

from breakstep.engine.execute import Interval, Output
from breakstep.engine.recording import Recorder, TaskRow
from breakstep.engine.resident.cycles import cycles_kept, longest_lag
from breakstep.engine.resident.states import Finish, TaskState
from breakstep.engine.resident.wire import Key, Parcel, size_of
from breakstep.graph.numbering import Numbering
from breakstep.graph.unroll import INITIAL, Phase

if TYPE_CHECKING:
    from breakstep.engine.resident.host import Assignment


class Notebook:
    """Rows of one worker, in the numbering of the whole run."""

    def __init__(self, told: Assignment, earlier: Notebook | None = None) -> None:
        program = told.program
        barriers = program.template.stages_with_barrier(told.options.barriers)
        self.on = told.options.record
        self.trace = told.options.trace
        self.recorder = Recorder(told.worker, told.zero)
        self.numbering = Numbering(len(program.tiling), len(told.addresses), barriers)
        self.left_behind: dict[int, int] = {}  # first numbers of phases, once a later run has taken over
        if earlier is not None:
            self.numbering = earlier.numbering
            earlier.left_behind = {number: first.steps for number, first in self.numbering.phases.items()}
            self.numbering.go_on(max(earlier.left_behind, default=INITIAL))
        self._kept = cycles_kept(told.options.window, longest_lag(program.problem.splitting.all_reductions()))
        self._lock = threading.Lock()
        self._first: dict[int, int] = {}  # cycle -> its first phase

    def phase(self, phase: Phase) -> None:
        """A phase has been emitted; numbers of cycles that are closed by then will not be asked for."""
        if not self.on:
            return
        with self._lock:
            self.numbering.add(phase)
            if self._first.setdefault(phase.cycle, phase.number) != phase.number:
                return
            self._first = {c: first for c, first in self._first.items() if c > phase.cycle - self._kept}
            self.numbering.forget(min(self._first.values()))

    def maker(self, phase: int, tile: int) -> int:
        """Number of the task that made a tile's state, after another run has taken over; -1 if unknown."""
        first = self.left_behind.get(phase, -1)
        return first + tile if first >= 0 else -1

    def begin_thread(self, number: int) -> None:
        """The calling thread will work under this number."""
        self.recorder.name_thread(number)

    def watch(self) -> tuple[int, int]:
        """Begin an interval of packing."""
        return time.perf_counter_ns(), time.thread_time_ns()

    def task(self, task: TaskState, thread: int, start: int, output: Output, packing: tuple[int, int] | None) -> int:
        """Enter a task whose rims are cut; returns its end [ns]."""
        end = time.perf_counter_ns()
        if not self.on:
            return end
        phase = task.phase
        number = self.numbering.step(phase.number, task.tile)
        if packing is not None:
            cpu = time.thread_time_ns() - packing[1]
            output.intervals.append(Interval("pack", phase.stage.name, packing[0], end, cpu))
        row = TaskRow(number, "step", phase.stage.name, task.tile, phase.cycle, phase.iteration)
        self.recorder.intervals(number, output.intervals)
        self.recorder.counters(number, output.counters)
        self.recorder.task(row, start, end, output.nbytes, output.skipped, thread=thread)
        if self.trace:
            self.recorder.checksums(number, phase.stage.name, output.fields)
        return end

    def control(self, kind: str, phase: Phase, place: tuple[int, ...], moment: int) -> None:
        """Enter a node, a counter or a release at the moment it did its work."""
        if not self.on:
            return
        numbering = self.numbering
        if kind == "combine":
            number = numbering.node(*place)
            label = next(m.reduction.name for m in phase.makes if m.instance == place[0])
        else:
            number = numbering.counter(phase.number, place[0]) if kind == "count" else numbering.release(phase.number)
            label = f"barrier:{phase.stage.name}"
        row = TaskRow(number, kind, label, -1, phase.cycle, phase.iteration)
        self.recorder.task(row, moment, moment, thread=0)

    def result(self, order: Finish, spent: tuple[int, int, int], thread: int | None) -> None:
        """Enter the root of a tree: start, end and processor time [ns]; a moment if no thread of ours worked on it."""
        if not self.on:
            return
        start, end, cpu = spent
        number, name, phase = self.numbering.node(*order.place), order.making.reduction.name, order.phase
        row = TaskRow(number, "combine", name, -1, phase.cycle, phase.iteration)
        if thread is None:
            self.recorder.task(row, end, end, thread=0)
            return
        self.recorder.intervals(number, [Interval("kernel", name, start, end, cpu)])
        self.recorder.task(row, start, end, thread=thread)

    def arrivals(self, sender: int, parcel: Parcel, arrived: int) -> None:
        """Enter what a message brought; packing and unpacking are booked with its first item."""
        if not self.on:
            return
        first = True
        for key, payload in parcel.items:
            for name, size in size_of(payload).items():
                spent = (parcel.packed, parcel.unpacked) if first else (0, 0)
                self.recorder.arrival(key, name, sender, size, spent, parcel.sent, arrived)
                first = False


def producer_of(key: Key, sender: int, numbering: Numbering, first_phase: dict[int, int]) -> int:
    """Number of the task that made an item; -1 for the initial state.

    Parameters
    ----------
    first_phase : dict of int to int
        For each reduction instance, the phase that made it.
    """
    kind = key[0]
    if kind == "task":
        return int(key[1])
    if kind == "rims":
        return numbering.step(key[3], key[2])
    if kind == "part":
        _, instance, level, index = key
        if level == 0:
            return numbering.step(first_phase[instance], index)
        return numbering.node(instance, level - 1, index)
    if kind == "value":
        return numbering.root(key[1])
    if kind == "count":
        return numbering.counter(key[1], sender)
    return numbering.release(key[1])
