"""A dispatch for tests: runs ready tasks in random order, and hands each only what its edges name."""

from __future__ import annotations

import random
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

from breakstep.engine.execute import Inputs, Output, Site, execute
from breakstep.engine.program import Program
from breakstep.engine.run import RunOptions, unroller_for
from breakstep.graph.tasks import Kind, Task, TaskGraph
from breakstep.graph.unroll import Need, Phase
from breakstep.mesh.halo import cut
from breakstep.mesh.mesh import Triple
from breakstep.steps.reduction import combine
from breakstep.steps.step import Array


@dataclass
class Shuffled:
    """One run.

    Parameters
    ----------
    owners : sequence of int
        Worker that owns each tile.
    seed : int
        Decides the order. Cycles may overlap as far as their edges allow.

    Attributes
    ----------
    order : list of int
        Numbers of the tasks as they ran.
    """

    program: Program
    barriers: Sequence[str]
    owners: Sequence[int]
    seed: int
    order: list[int] = field(default_factory=list)
    tasks: dict[int, Task] = field(default_factory=dict)

    def __post_init__(self) -> None:
        self.random = random.Random(self.seed)
        self.graph = TaskGraph(self.program.tiling, self.owners)
        self.made: dict[int, Any] = {}
        self.waiting: dict[int, set[int]] = {}  # task -> producers that have not run
        self.ready: list[int] = []

    def run(self) -> dict[str, list[Array]]:
        """Final arrays of each field, by tile."""
        for tile in range(len(self.program.tiling)):
            self.made[-1 - tile] = Output(self.program.initial(tile), {})
        unroller = unroller_for(self.program, RunOptions(tuple(self.barriers)))
        phases, answer = unroller.run(), None
        while True:
            try:
                event = phases.send(answer)
            except StopIteration:
                break
            if isinstance(event, Need):
                answer = [self._until(self.graph.root(instance)) for instance in event.instances]
            else:
                answer = None
                self._add(event, unroller.live_phases(self.program.state_fields))
        while self.ready:
            self._run_one()
        assert not self.waiting
        return {name: self._final(name, unroller.latest(name)) for name in self.program.state_fields}

    def _add(self, phase: Phase, live: frozenset[int]) -> None:
        barrier = phase.stage.index in self.program.template.stages_with_barrier(self.barriers)
        for task in self.graph.expand(phase, barrier_after=barrier):
            self.tasks[task.number] = task
            missing = {producer for producer, _ in task.edges() if producer not in self.made}
            if missing:
                self.waiting[task.number] = missing
            else:
                self.ready.append(task.number)
        self.graph.forget(live)

    def _until(self, number: int) -> Array:
        while number not in self.made:
            self._run_one()
        return self.made[number]  # type: ignore[no-any-return]

    def _run_one(self) -> None:
        number = self.ready.pop(self.random.randrange(len(self.ready)))
        self.order.append(number)
        self.made[number] = self._work(self.tasks[number])
        for other in [n for n, missing in self.waiting.items() if number in missing]:
            self.waiting[other].discard(number)
            if not self.waiting[other]:
                del self.waiting[other]
                self.ready.append(other)

    def _work(self, task: Task) -> Any:
        given = {producer: self.made[producer] for producer, _ in task.edges()}
        if task.kind is Kind.STEP:
            site = Site(task.phase.stage.index, task.tile, task.phase.cycle, task.phase.iteration)
            return execute(self.program, site, self._inputs(task, given))
        if task.kind is Kind.PACK:
            return self._pack(task, given)
        return self._combine(task, given) if task.kind is Kind.COMBINE else None

    def _inputs(self, task: Task, given: dict[int, Any]) -> Inputs:
        rims: dict[str, dict[Triple, Array]] = {}
        for rim in task.rims:
            source = given[rim.producer]
            key = (rim.field, task.tile, rim.rim.offset)
            array = source[key] if rim.packed else cut(rim.rim, source.fields[rim.field])
            rims.setdefault(rim.field, {})[rim.rim.offset] = array
        passes = False
        if task.gate is not None:
            root, row = task.gate
            passes = self.program.stop(task.phase.stage.index, given[root][row])
        return Inputs(
            own={name: given[producer].fields[name] for name, producer in task.own.items()},
            rims=rims,
            values={name: given[root][row] for name, (root, row) in task.values.items()},
            passes=passes,
        )

    def _pack(self, task: Task, given: dict[int, Any]) -> Any:
        (source,) = given.values()
        if task.making is not None:
            return {"partial": source.partials[task.making.reduction.name]}
        return {(name, tile, rim.offset): cut(rim, source.fields[name]).copy() for name, rim, tile in task.cuts}

    def _combine(self, task: Task, given: dict[int, Any]) -> Array | None:
        making = task.making
        assert making is not None
        parts = [_contribution(given[number], making.reduction.name) for number in task.children]
        combined = combine(making.reduction.combine, parts)
        if self.graph.root(making.instance) != task.number:
            return combined
        previous = given[task.previous][-1] if task.previous is not None else None
        return self.program.finish(task.phase.stage.index, making.reduction, combined, previous, making.rows)

    def _final(self, name: str, phase: int) -> list[Array]:
        tiles = range(len(self.program.tiling))
        numbers = self.graph.step_tasks(phase) if phase else [-1 - tile for tile in tiles]
        return [self.made[number].fields[name] for number in numbers]


def _contribution(made: Any, reduction: str) -> Array | None:
    if isinstance(made, Output):
        return made.partials[reduction]
    vector: Array | None = made["partial"] if isinstance(made, dict) else made
    return vector
