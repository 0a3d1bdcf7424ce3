"""Executing one task: halos in, kernels, checks, arrays out, with every nanosecond noted.

All dispatches call this, so that the same inputs give the same bits everywhere. Outputs are
write-protected: a kernel that changes what it was given fails at once.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from breakstep.engine.program import Program
from breakstep.engine.underway import CALLS
from breakstep.errors import KernelError
from breakstep.kernels.finite import first_not_finite
from breakstep.mesh.fields import Field
from breakstep.mesh.halo import assemble
from breakstep.mesh.mesh import Triple
from breakstep.mesh.tiling import Tile
from breakstep.steps.calling import call_user
from breakstep.steps.step import Array, Call, Step


@dataclass(frozen=True)
class Site:
    """Which step task this is: a stage of the program at one tile, cycle and iteration."""

    stage: int
    tile: int
    cycle: int
    iteration: int


@dataclass
class Inputs:
    """Everything a step task waits for.

    Attributes
    ----------
    own : mapping of field to ndarray
        The tile's own zones of every field read.
    rims : mapping of field to mapping of offset to ndarray
        Neighbours' zones, cut to what is read.
    values : mapping of reduction to ndarray
        Results that the steps use.
    passes : bool
        Whether the repeat has already converged, so that fields are handed on as they are.
    """

    own: Mapping[str, Array]
    rims: Mapping[str, Mapping[Triple, Array]] = field(default_factory=dict)
    values: Mapping[str, Array] = field(default_factory=dict)
    passes: bool = False


@dataclass
class Interval:
    """A stretch of one task spent on one thing [ns]."""

    what: str
    step: str
    start: int
    end: int
    cpu: int


@dataclass
class Output:
    """What a step task made, and how.

    ``partials`` holds each reduction's contribution, or None when the task passed its fields through.
    """

    fields: dict[str, Array]
    partials: dict[str, Array | None]
    skipped: bool = False
    intervals: list[Interval] = field(default_factory=list)
    counters: list[tuple[str, str, int]] = field(default_factory=list)

    @property
    def nbytes(self) -> int:
        """Bytes of the arrays made by this task (handed-on arrays are somebody else's)."""
        return 0 if self.skipped else sum(array.nbytes for array in self.fields.values())


class Stopwatch:
    """Notes intervals of wall and thread CPU time."""

    def __init__(self) -> None:
        self.intervals: list[Interval] = []

    def start(self) -> tuple[int, int]:
        """Begin; hand the result to :meth:`stop`."""
        return time.perf_counter_ns(), time.thread_time_ns()

    def stop(self, what: str, step: str, began: tuple[int, int], stands_for: int = -1) -> None:
        """End an interval; a wait that stands for processor time is noted as having used it."""
        cpu = stands_for if stands_for >= 0 else time.thread_time_ns() - began[1]
        self.intervals.append(Interval(what, step, began[0], time.perf_counter_ns(), cpu))


def execute(program: Program, site: Site, inputs: Inputs) -> Output:
    """Run one step task.

    Raises
    ------
    KernelError
        A kernel yielded a wrong shape or a number that is not finite, raised, or says so itself.
    """
    try:
        return _execute(program, site, inputs)
    except KernelError as error:
        for key in ("tile", "cycle", "iteration"):
            error.details.setdefault(key, getattr(site, key))
        raise


def _execute(program: Program, site: Site, inputs: Inputs) -> Output:
    stage = program.template.stages[site.stage]
    if inputs.passes:
        fields = {name: inputs.own[name] for name in stage.writes}
        return Output(fields, dict.fromkeys((r.name for r in stage.partials), None), skipped=True)
    watch = Stopwatch()
    arrays = dict(inputs.own)
    output = Output({}, {}, intervals=watch.intervals)
    for step in stage.steps:
        values = {name: inputs.values[name] for name in step.uses}  # not what its stage mates use
        call = _call(program, site, step.name, values, step.fraction)
        given = _gather(program, site.tile, step, arrays, inputs, watch)
        began = watch.start()
        made = _called(step.kernel, given, call)
        watch.stop("kernel", step.name, began, call.stands_for)
        arrays |= check_arrays(made, step.writes, program.fields, program.tiling.tiles[site.tile], call.where())
        output.counters += [(step.name, name, amount) for name, amount in call.counters.items()]
    for reduction in stage.partials:
        call = _call(program, site, reduction.name, {}, 1.0)
        given = {read.field: arrays[read.field] for read in reduction.reads}
        began = watch.start()
        vector = _called(reduction.kernel, given, call)
        watch.stop("kernel", reduction.name, began)
        output.partials[reduction.name] = _check_vector(vector, call)
    output.fields = {name: arrays[name] for name in stage.writes}
    return output


def _called(kernel: Callable[..., Any], given: Mapping[str, Array], call: Call) -> Any:
    """What a kernel returns, and a note of it while it runs if somebody wants one."""
    if not CALLS.on:
        return call_user(kernel, given, call, where=call.where())
    with CALLS.under_way(call):
        return call_user(kernel, given, call, where=call.where())


def _call(program: Program, site: Site, step: str, values: Mapping[str, Array], fraction: float) -> Call:
    tile, mesh = program.tiling.tiles[site.tile], program.problem.mesh
    return Call(
        step=step,
        cycle=site.cycle,
        iteration=site.iteration,
        tile=site.tile,
        origin=tile.origin,
        shape=tile.shape,
        widths=mesh.widths,
        active=mesh.active,
        values=values,
        fraction=fraction,
    )


def _gather(
    program: Program, tile: int, step: Step, arrays: Mapping[str, Array], inputs: Inputs, watch: Stopwatch
) -> dict[str, Array]:
    """The arrays one step reads; halos are assembled for the stage's outside reads only."""
    given = {}
    for read in step.reads:
        if read.is_local:
            given[read.field] = arrays[read.field]
            continue
        began = watch.start()
        plan = program.plans.plan(tile, read)
        rims = inputs.rims.get(read.field, {})
        given[read.field] = assemble(plan, program.fields[read.field], arrays[read.field], rims)
        watch.stop("halo", step.name, began)
    return given


def check_arrays(
    made: object, expected: Sequence[str], fields: Mapping[str, Field], tile: Tile, where: str
) -> dict[str, Array]:
    """Refuse missing, extra, misshapen or not finite arrays; give back the good ones, write-protected.

    They come back C-contiguous, as they are after a journey between workers: NumPy's sums run in memory
    order, so that the bits of a later kernel could otherwise depend on whether its input had travelled.

    Raises
    ------
    KernelError
    """
    if not isinstance(made, Mapping):
        raise KernelError(f"{where}: expected a mapping of field to array, got {type(made).__name__}")
    if set(made) != set(expected):
        raise KernelError(
            f"{where}: expected new arrays for {_listed(expected)}, got {_listed(made)};"
            " return one array for each declared write"
        )
    checked = {}
    for name, array in made.items():
        shape = fields[name].shape(tile.shape)
        if not isinstance(array, np.ndarray) or array.dtype != np.float64 or array.shape != shape:
            came = f"{array.dtype} {array.shape}" if isinstance(array, np.ndarray) else type(array).__name__
            raise KernelError(f"{where}: field {name!r} must be float64 of shape {shape}, got {came}")
        whole = np.ascontiguousarray(array)
        flat = whole.reshape(-1)
        # Scratch is large, and what is wrong in it reaches the state within the cycle.
        bad = -1 if fields[name].scratch else first_not_finite(flat)
        if bad >= 0:
            component, *zone = (int(i) for i in np.unravel_index(bad, shape))
            raise not_finite(fields[name], component, _global(zone, tile), float(flat[bad]), where)
        _protect(whole)
        checked[name] = whole
    return checked


def _protect(array: Array) -> None:
    """Write-protect an array and what it is a view of: a kernel that fills one buffer again and again must fail."""
    owner: object = array
    while isinstance(owner, np.ndarray):
        owner.flags.writeable = False
        owner = owner.base


def not_finite(field: Field, component: int, zone: Triple, value: float, where: str) -> KernelError:
    """The error for a zone that holds NaN or an infinity."""
    return KernelError(
        f"{where}: {field.name} {field.components[component]} is {value} in zone {zone};"
        " the state before it and the time step are the places to look",
        zone=zone,
    )


def _global(zone: Sequence[int], tile: Tile) -> Triple:
    return tuple(z + o for z, o in zip(zone, tile.origin, strict=True))  # type: ignore[return-value]


def _check_vector(vector: Any, call: Call) -> Array:
    array = call_user(np.asarray, vector, np.float64, where=call.where())
    if array.ndim != 1:
        raise KernelError(f"{call.where()}: a reduction's kernel must return a vector, got shape {array.shape}")
    return array


def _listed(names: Sequence[str] | Mapping[str, Array]) -> str:
    return ", ".join(sorted(names)) or "nothing"
