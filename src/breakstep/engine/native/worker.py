"""What runs on a Dask worker: the functions behind the tasks, and the run they belong to.

A worker is told of a run once (:func:`begin`), works on its tasks, and hands its record over at the end
(:func:`collect`). Tasks carry only numbers; the program with its kernels is already there.
"""

from __future__ import annotations

import time
from dataclasses import dataclass
from typing import Any

from breakstep.engine.allocator import keep_memory, release_memory
from breakstep.engine.execute import Inputs, Interval, Site, execute
from breakstep.engine.native import payload as wire
from breakstep.engine.native.payload import Payload
from breakstep.engine.program import Program
from breakstep.engine.recording import Recorder, TaskRow
from breakstep.engine.run import RunOptions
from breakstep.errors import ClusterError
from breakstep.mesh.halo import cut
from breakstep.mesh.mesh import Triple
from breakstep.profile.record import RunRecord
from breakstep.steps.reduction import combine
from breakstep.steps.step import Array, Read


@dataclass
class _Run:
    """One run as this worker knows it."""

    program: Program
    recorder: Recorder
    options: RunOptions


_RUNS: dict[str, _Run] = {}


@dataclass(frozen=True)
class RimSpec:
    """A rim to read: from the payload at ``dep``, by offset; packed rims are found under their own key."""

    field: str
    offset: Triple
    dep: int
    packed: bool


@dataclass(frozen=True)
class StepSpec:
    """A step task by numbers; ``dep`` fields index the payloads handed to :func:`run_step`."""

    row: TaskRow
    site: Site
    own: tuple[tuple[str, int], ...]
    rims: tuple[RimSpec, ...]
    values: tuple[tuple[str, int, int], ...]
    gate: tuple[int, int] | None


@dataclass(frozen=True)
class CutSpec:
    """A rim to cut for a consumer tile: found again in the consumer's halo plan by offset."""

    field: str
    read: Read
    tile: int
    offset: Triple


@dataclass(frozen=True)
class CombineSpec:
    """A node of a reduction tree; the root makes ``rows`` rows, from the previous result where there is one."""

    row: TaskRow
    stage: int
    reduction: str
    rows: int
    is_root: bool
    has_previous: bool


def begin(run: str, program: Program, worker: int, zero: int, options: RunOptions) -> None:
    """Tell this worker of a run and of its clock's reading at the run's origin."""
    keep_memory(run)
    _RUNS[run] = _Run(program, Recorder(worker, zero), options)


def collect(run: str, threads: int) -> dict[str, Any]:
    """Give up the record of a run and forget the run."""
    release_memory(run)
    state = _RUNS.pop(run, None)
    if state is None:
        return {"worker": -1, "tables": RunRecord().tables(), "arrivals": [], "zero": 0}
    recorder = state.recorder
    recorder.complete_threads(threads)
    mine = [a for a in wire.ARRIVALS if a.run == run]
    wire.ARRIVALS[:] = [a for a in wire.ARRIVALS if a.run != run]
    tables = recorder.record.tables()
    return {"worker": recorder.worker, "tables": tables, "arrivals": mine, "zero": recorder.zero}


def _state(run: str) -> _Run:
    try:
        return _RUNS[run]
    except KeyError:
        raise ClusterError(
            f"a worker was asked for a task of run {run}, of which it was never told;"
            " it joined or restarted after the run began: start the run again"
        ) from None


def initial(run: str, tile: int, worker: int) -> Payload:
    """The initial state of one tile; made before the run's first task, so no task of the record."""
    return Payload(run, -1 - tile, worker, dict(_state(run).program.initial(tile)))


def run_step(run: str, spec: StepSpec, *deps: Payload) -> Payload:
    """A step task."""
    start = time.perf_counter_ns()
    state = _state(run)
    program, recorder = state.program, state.recorder
    output = execute(program, spec.site, _inputs(program, spec, deps))
    made = Payload(run, spec.row.number, recorder.worker, dict(output.fields), output.partials)
    if state.options.record:
        recorder.intervals(spec.row.number, output.intervals)
        recorder.counters(spec.row.number, output.counters)
        recorder.task(spec.row, start, time.perf_counter_ns(), output.nbytes, output.skipped)
        if state.options.trace:
            recorder.checksums(spec.row.number, spec.row.stage, output.fields)
    return made


def _inputs(program: Program, spec: StepSpec, deps: tuple[Payload, ...]) -> Inputs:
    rims: dict[str, dict[Triple, Array]] = {}
    stage = program.template.stages[spec.site.stage]
    reads = {read.field: read for read in stage.reads}
    for rim in spec.rims:
        source = deps[rim.dep].arrays
        if rim.packed:
            array = source[(rim.field, spec.site.tile, rim.offset)]
        else:
            array = cut(program.rim(spec.site.tile, reads[rim.field], rim.offset), source[rim.field])
        rims.setdefault(rim.field, {})[rim.offset] = array
    passes = False
    if spec.gate is not None:
        dep, row = spec.gate
        passes = program.stop(spec.site.stage, deps[dep].arrays["value"][row])
    return Inputs(
        own={name: deps[dep].arrays[name] for name, dep in spec.own},
        rims=rims,
        values={name: deps[dep].arrays["value"][row] for name, dep, row in spec.values},
        passes=passes,
    )


def run_pack(run: str, row: TaskRow, cuts: tuple[CutSpec, ...], source: Payload) -> Payload:
    """Cut the rims that another worker needs."""
    start, cpu = time.perf_counter_ns(), time.thread_time_ns()
    state = _state(run)
    made = Payload(run, row.number, state.recorder.worker)
    for piece in cuts:
        rim = state.program.rim(piece.tile, piece.read, piece.offset)
        made.arrays[(piece.field, piece.tile, piece.offset)] = cut(rim, source.arrays[piece.field]).copy()
    if state.options.record:
        end = time.perf_counter_ns()
        packing = Interval("pack", row.stage, start, end, time.thread_time_ns() - cpu)
        state.recorder.intervals(row.number, [packing])
        state.recorder.task(row, start, end, made.nbytes)
    return made


def run_pick(run: str, row: TaskRow, reduction: str, source: Payload) -> Payload:
    """Cut a tile's contribution to a reduction out, for a node on another worker."""
    start = time.perf_counter_ns()
    state = _state(run)
    made = Payload(run, row.number, state.recorder.worker)
    made.partials[reduction] = source.partials[reduction]
    if state.options.record:
        state.recorder.task(row, start, time.perf_counter_ns())
    return made


def run_combine(run: str, spec: CombineSpec, *deps: Payload) -> Payload:
    """A node of a reduction tree; the root turns the sum into the result."""
    start = time.perf_counter_ns()
    state = _state(run)
    reduction = state.program.reduction(spec.reduction)
    children = deps[:-1] if spec.has_previous else deps
    parts = [d.partials[spec.reduction] if d.partials else d.arrays.get("value") for d in children]
    combined = combine(reduction.combine, parts)
    made = Payload(run, spec.row.number, state.recorder.worker)
    if spec.is_root:
        previous = deps[-1].arrays["value"][-1] if spec.has_previous else None
        made.arrays["value"] = state.program.finish(spec.stage, reduction, combined, previous, spec.rows)
    elif combined is not None:
        made.arrays["value"] = combined
    if state.options.record:
        state.recorder.task(spec.row, start, time.perf_counter_ns(), made.nbytes)
    return made


def run_control(run: str, row: TaskRow, *deps: Payload) -> Payload:
    """A barrier's counter or release: it only has to come after what it depends on."""
    start = time.perf_counter_ns()
    state = _state(run)
    del deps
    if state.options.record:
        state.recorder.task(row, start, time.perf_counter_ns())
    return Payload(run, row.number, state.recorder.worker)
