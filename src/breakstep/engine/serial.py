"""The reference: every task in one thread, in program order. Every other dispatch must equal it to the bit."""

from __future__ import annotations

import time
from dataclasses import dataclass, field

from breakstep.engine.execute import Inputs, Output, Site, execute
from breakstep.engine.program import Program
from breakstep.engine.recording import Recorder, record_edges, task_row
from breakstep.engine.run import Progress, RunOptions, RunResult, unroller_for
from breakstep.errors import BreakstepError
from breakstep.graph.tasks import Kind, Task, TaskGraph
from breakstep.graph.unroll import Need, Phase, Unroller
from breakstep.mesh.halo import cut
from breakstep.mesh.mesh import Triple
from breakstep.steps.reduction import combine, finish_rows
from breakstep.steps.step import Array


class SerialDispatch:
    """Runs a program in the calling thread."""

    name = "serial"
    workers = 1
    threads = 1

    def run(self, program: Program, options: RunOptions, progress: Progress | None = None) -> RunResult:
        """Run a program; errors and interrupts end up in the result."""
        return _SerialRun(program, options, progress).run()


@dataclass
class _SerialRun:
    """One run's state: arrays of live phases, results of reductions."""

    program: Program
    options: RunOptions
    progress: Progress | None
    outputs: dict[int, Output] = field(default_factory=dict)
    vectors: dict[int, Array | None] = field(default_factory=dict)
    cycles: int = 0

    def run(self) -> RunResult:
        program = self.program
        tiles = range(len(program.tiling))
        self.unroller = unroller_for(program, self.options)
        self.graph = TaskGraph(program.tiling, [0] * len(program.tiling))
        interrupted, failure = False, None
        began = time.perf_counter_ns()
        self.recorder = Recorder(worker=0, zero=began)
        try:
            for tile in tiles:
                self.outputs[-1 - tile] = Output(program.initial(tile), {})
            self._drive()
        except KeyboardInterrupt:
            interrupted = True
        except BreakstepError as error:
            failure = error
        seconds = (time.perf_counter_ns() - began) / 1e9
        self.recorder.complete_threads(1)
        fields = {} if interrupted or failure else self._final(self.unroller)
        values = {} if interrupted or failure else self._values(self.unroller)
        return RunResult(fields, values, self.recorder.record, seconds, self.cycles, interrupted, failure)

    def _drive(self) -> None:
        phases = self.unroller.run()
        answer: list[Array] | None = None
        while True:
            try:
                event = phases.send(answer)
            except StopIteration:
                break
            answer = None
            if isinstance(event, Need):
                answer = [self._vector(self.graph.root(i)) for i in event.instances]
            else:
                self._phase(event)

    def _phase(self, phase: Phase) -> None:
        barrier = phase.stage.index in self.program.template.stages_with_barrier(self.options.barriers)
        tasks = self.graph.expand(phase, barrier_after=barrier)
        for task in tasks:
            self._task(task)
        if self.options.record:
            record_edges(self.recorder.record, tasks)
        dead = self.graph.forget(self.unroller.live_phases(self.program.state_fields))
        live = {n for p in self.unroller.live_phases(self.program.state_fields) if p for n in self.graph.step_tasks(p)}
        if dead:
            keep_initial = 0 in self.unroller.live_phases(self.program.state_fields)
            self.outputs = {n: o for n, o in self.outputs.items() if n in live or (n < 0 and keep_initial)}
        if phase.cycle + 1 > self.cycles and phase.cycle >= 0:
            self.cycles = phase.cycle + 1
            if self.progress is not None:
                self.progress(self.cycles)

    def _task(self, task: Task) -> None:
        start = time.perf_counter_ns()
        nbytes, skipped = 0, False
        if task.kind is Kind.STEP:
            site = Site(task.phase.stage.index, task.tile, task.phase.cycle, task.phase.iteration)
            output = execute(self.program, site, self._inputs(task))
            self.outputs[task.number] = output
            nbytes, skipped = output.nbytes, output.skipped
            self.recorder.intervals(task.number, output.intervals)
            self.recorder.counters(task.number, output.counters)
        elif task.kind is Kind.COMBINE:
            self._combine(task)
        self.recorder.task(task_row(task), start, time.perf_counter_ns(), nbytes, skipped)

    def _inputs(self, task: Task) -> Inputs:
        rims: dict[str, dict[Triple, Array]] = {}
        for rim in task.rims:
            neighbour = self.outputs[rim.producer].fields[rim.field]
            rims.setdefault(rim.field, {})[rim.rim.offset] = cut(rim.rim, neighbour)
        repeat = self._stop(task)
        return Inputs(
            own={name: self.outputs[producer].fields[name] for name, producer in task.own.items()},
            rims=rims,
            values={name: self._vector(root)[row] for name, (root, row) in task.values.items()},
            passes=repeat,
        )

    def _stop(self, task: Task) -> bool:
        if task.gate is None:
            return False
        root, row = task.gate
        return self.program.stop(task.phase.stage.index, self._vector(root)[row])

    def _vector(self, number: int) -> Array:
        vector = self.vectors[number]
        assert vector is not None
        return vector

    def _combine(self, task: Task) -> None:
        making = task.making
        assert making is not None
        name = making.reduction.name
        parts = [
            self.outputs[n].partials[name] if n in self.outputs else self.vectors[n] for n in task.children
        ]
        combined = combine(making.reduction.combine, parts)
        if self.graph.root(making.instance) != task.number:
            self.vectors[task.number] = combined
            return
        previous = self._vector(task.previous)[-1] if task.previous is not None else None
        self.vectors[task.number] = finish_rows(making.reduction, combined, previous, making.rows)

    def _final(self, unroller: Unroller) -> dict[str, list[Array]]:
        final = {}
        for name in self.program.state_fields:
            phase = unroller.latest(name)
            numbers = self.graph.step_tasks(phase) if phase else [-1 - t for t in range(len(self.program.tiling))]
            final[name] = [self.outputs[number].fields[name] for number in numbers]
        return final

    def _values(self, unroller: Unroller) -> dict[str, Array]:
        return {name: self._vector(self.graph.root(i)) for name, i in unroller.last_values().items()}
