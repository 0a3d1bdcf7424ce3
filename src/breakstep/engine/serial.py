"""The reference: every task in one thread, in program order. Every other dispatch must equal it to the bit."""

from __future__ import annotations

import contextlib
import faulthandler
import threading
import time
from dataclasses import dataclass, field

from breakstep.engine.execute import Inputs, Output, Site, execute
from breakstep.engine.overdue import SILENCE_SECONDS, overdue
from breakstep.engine.program import Program
from breakstep.engine.recording import Recorder, record_edges, task_row
from breakstep.engine.run import Progress, RunOptions, RunResult, unroller_for
from breakstep.engine.underway import CALLS
from breakstep.errors import BreakstepError, OverdueError
from breakstep.graph.tasks import Kind, Task, TaskGraph
from breakstep.graph.unroll import INITIAL, Need, Phase, Unroller
from breakstep.mesh.halo import cut
from breakstep.mesh.mesh import Triple
from breakstep.steps.reduction import combine
from breakstep.steps.step import Array

LOOK_SECONDS = 0.05
LEAVE_SECONDS = 2.0  # most that a kernel may go on when the user stops the run


class SerialDispatch:
    """Runs a program in the calling thread."""

    name = "serial"
    workers = 1
    threads = 1

    def run(self, program: Program, options: RunOptions, progress: Progress | None = None) -> RunResult:
        """Run a program; errors and interrupts end up in the result.

        With a limit on how long a kernel may take, another thread runs it and this one looks. A kernel that holds
        the interpreter's lock silences this one, too: then the process ends some seconds later with the traceback
        and exit code 1.
        """
        run = _SerialRun(program, options, progress)
        return overseen(run, options.task_timeout) if options.task_timeout else run.run()


def overseen(run: _SerialRun, limit: float) -> RunResult:
    """What a run in a thread of its own leaves, or what there is of it when a kernel does not return."""
    results: list[RunResult] = []
    thread = threading.Thread(target=lambda: results.append(run.run()), name="breakstep-serial", daemon=True)
    CALLS.keep()
    _arm(limit)
    thread.start()
    try:
        while not results and thread.is_alive():
            thread.join(LOOK_SECONDS)
            overdue(CALLS.now(), limit)
            _arm(limit)
    except (OverdueError, KeyboardInterrupt) as error:
        run.is_over = True
        thread.join(LEAVE_SECONDS if isinstance(error, KeyboardInterrupt) else 0.0)
        return run.result(0.0, isinstance(error, KeyboardInterrupt), error if isinstance(error, OverdueError) else None)
    finally:
        CALLS.forget()
        faulthandler.cancel_dump_traceback_later()
    return results[0]


def _arm(limit: float) -> None:
    """End this process should this thread not come by again, because a kernel holds the interpreter's lock."""
    with contextlib.suppress(OSError):  # no standard error to write to
        faulthandler.dump_traceback_later(limit + SILENCE_SECONDS, exit=True, file=2)


@dataclass
class _SerialRun:
    """One run's state: arrays of live phases, results of reductions."""

    program: Program
    options: RunOptions
    progress: Progress | None
    outputs: dict[int, Output] = field(default_factory=dict)
    vectors: dict[int, Array | None] = field(default_factory=dict)
    cycles: int = 0
    newest: int = -1  # cycle of the last phase that ran
    is_over: bool = False  # somebody else has taken the result; what is still made comes too late

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
        return self.result((time.perf_counter_ns() - began) / 1e9, interrupted, failure)

    def result(self, seconds: float, interrupted: bool, failure: BreakstepError | None) -> RunResult:
        """What there is; fields and values only of a run that ended well."""
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
        if self.newest >= self.cycles:
            self._completed(self.newest + 1)

    def _phase(self, phase: Phase) -> None:
        barrier = phase.stage.index in self.program.template.stages_with_barrier(self.options.barriers)
        if phase.cycle > self.cycles:
            self._completed(phase.cycle)
        tasks = self.graph.expand(phase, barrier_after=barrier)
        if self.options.record:
            record_edges(self.recorder.record, tasks)
        for task in tasks:
            self._task(task)
        self.newest = phase.cycle
        self._let_go()

    def _let_go(self) -> None:
        """Drop the arrays that nothing will read again."""
        live = self.unroller.live_phases(self.program.state_fields)
        roots = self.graph.forget_control(self.unroller.live_instances(), self.unroller.barred)
        self.vectors = {root: self.vectors[root] for root in roots}
        if not self.graph.forget(live):
            return
        wanted = {number for phase in live if phase != INITIAL for number in self.graph.step_tasks(phase)}
        self.outputs = {n: o for n, o in self.outputs.items() if n in wanted or (n < 0 and INITIAL in live)}

    def _completed(self, cycles: int) -> None:
        self.cycles = cycles
        if self.progress is not None:
            self.progress(cycles)

    def _task(self, task: Task) -> None:
        start = time.perf_counter_ns()
        output = Output({}, {})
        self._heed()
        if task.kind is Kind.STEP:
            site = Site(task.phase.stage.index, task.tile, task.phase.cycle, task.phase.iteration)
            output = self.outputs[task.number] = execute(self.program, site, self._inputs(task))
        elif task.kind is Kind.COMBINE:
            self._combine(task)
        self._heed()
        if self.options.record:
            self._note(task, start, output)

    def _heed(self) -> None:
        if self.is_over:
            raise KeyboardInterrupt

    def _note(self, task: Task, start: int, output: Output) -> None:
        recorder, number = self.recorder, task.number
        recorder.task(task_row(task), start, time.perf_counter_ns(), output.nbytes, output.skipped)
        recorder.intervals(number, output.intervals)
        recorder.counters(number, output.counters)
        if self.options.trace:
            recorder.checksums(number, task.label, output.fields)

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
        parts = [self.outputs[n].partials[name] if n in self.outputs else self.vectors[n] for n in task.children]
        combined = combine(making.reduction.combine, parts)
        if self.graph.root(making.instance) != task.number:
            self.vectors[task.number] = combined
            return
        previous = self._vector(task.previous)[-1] if task.previous is not None else None
        stage = task.phase.stage.index
        self.vectors[task.number] = self.program.finish(stage, making.reduction, combined, previous, making.rows)

    def _final(self, unroller: Unroller) -> dict[str, list[Array]]:
        final = {}
        for name in self.program.state_fields:
            phase = unroller.latest(name)
            numbers = self.graph.step_tasks(phase) if phase else [-1 - t for t in range(len(self.program.tiling))]
            final[name] = [self.outputs[number].fields[name] for number in numbers]
        return final

    def _values(self, unroller: Unroller) -> dict[str, Array]:
        return {name: self._vector(self.graph.root(i)) for name, i in unroller.last_values().items()}
