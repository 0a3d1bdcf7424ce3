"""The record that one worker of a resident run keeps.

Tasks are numbered here exactly as the driver numbers them afterwards, from the phases alone. Nodes of
trees, counters and releases do their work in no time worth measuring, in the event loop or in a thread
that has just finished a task; they are entered as moments.
"""

from __future__ import annotations

import threading
import time
from typing import TYPE_CHECKING

from breakstep.engine.execute import Interval, Output
from breakstep.engine.recording import Recorder, TaskRow
from breakstep.engine.resident.core import TaskState
from breakstep.engine.resident.wire import Key, Parcel, size_of
from breakstep.graph.numbering import Numbering
from breakstep.graph.unroll import INITIAL, Phase

if TYPE_CHECKING:
    from breakstep.engine.resident.host import Assignment

KEPT_PHASES = 256  # numbers of older phases are dropped: nothing under way can refer to them any more


class Notebook:
    """Rows of one worker, in the numbering of the whole run."""

    def __init__(self, told: Assignment) -> None:
        program = told.program
        barriers = program.template.stages_with_barrier(told.options.barriers)
        self.on = told.options.record
        self.trace = told.options.trace
        self.recorder = Recorder(told.worker, told.zero)
        self.numbering = Numbering(len(program.tiling), len(told.addresses), barriers)
        self._lock = threading.Lock()
        self._phases: dict[int, Phase] = {}

    def phase(self, phase: Phase) -> None:
        """A phase has been emitted."""
        if not self.on:
            return
        with self._lock:
            self.numbering.add(phase)
            self._phases[phase.number] = phase
            if phase.number % KEPT_PHASES == 0:
                old = phase.number - KEPT_PHASES
                self.numbering.forget(min(old, *self._referred(old)))
                self._phases = {n: p for n, p in self._phases.items() if n >= old}

    def _referred(self, before: int) -> list[int]:
        """Phases that recent phases still refer to."""
        recent = [phase for number, phase in self._phases.items() if number >= before]
        return [source for phase in recent for source in phase.sources.values() if source != INITIAL] or [before]

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
    if kind == "rims":
        return -1 if key[3] == INITIAL else numbering.step(key[3], key[2])
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
