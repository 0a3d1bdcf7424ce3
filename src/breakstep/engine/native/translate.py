"""From tasks of the graph to tasks of Dask: keys, dependencies, and the numbers a worker needs."""

from __future__ import annotations

from dask._task_spec import Task as DaskTask
from dask._task_spec import TaskRef

from breakstep.engine.execute import Site
from breakstep.engine.native import worker as remote
from breakstep.engine.native.worker import CombineSpec, CutSpec, RimSpec, StepSpec
from breakstep.engine.program import Program
from breakstep.engine.recording import task_row
from breakstep.graph.tasks import Kind, Task, TaskGraph


class Translation:
    """Translates the tasks of one run.

    Keys begin with the stage's name, so that Dask's own pages group tasks by step; what follows makes them
    unique. Dependencies are explicit references: an argument that happened to equal a key would become one.
    """

    def __init__(self, run: str, program: Program, graph: TaskGraph) -> None:
        self.run = run
        self.program = program
        self.graph = graph
        self._names: dict[int, str] = {}

    def key(self, number: int) -> str:
        """The Dask key of a task that has been translated, or of a tile's initial state."""
        if number < 0:
            return f"initial-{self.run}-{-1 - number}"
        return self._names[number]

    def forget(self, wanted: set[int]) -> None:
        """Drop the names of tasks that no later task will refer to."""
        self._names = {number: name for number, name in self._names.items() if number in wanted}

    def name(self, task: Task) -> str:
        """Give a task its key."""
        return self._names.setdefault(task.number, f"{task.label.replace(':', '_')}-{self.run}-{task.number}")

    def initial(self, tile: int, worker: int) -> DaskTask:
        """The Dask task that makes a tile's initial state."""
        return DaskTask(self.key(-1 - tile), remote.initial, self.run, tile, worker)

    def task(self, task: Task) -> DaskTask:
        """The Dask task for one task of the graph."""
        make = {
            Kind.STEP: self._step,
            Kind.PACK: self._pack,
            Kind.COMBINE: self._combine,
            Kind.COUNT: self._control,
            Kind.RELEASE: self._control,
        }
        return make[task.kind](task)

    def _refs(self, numbers: list[int]) -> list[TaskRef]:
        return [TaskRef(self.key(number)) for number in numbers]

    def _step(self, task: Task) -> DaskTask:
        places: dict[int, int] = {}

        def place(number: int) -> int:
            return places.setdefault(number, len(places))

        spec = StepSpec(
            row=task_row(task),
            site=Site(task.phase.stage.index, task.tile, task.phase.cycle, task.phase.iteration),
            own=tuple((name, place(number)) for name, number in task.own.items()),
            rims=tuple(RimSpec(r.field, r.rim.offset, place(r.producer), r.packed) for r in task.rims),
            values=tuple((name, place(root), row) for name, (root, row) in task.values.items()),
            gate=(place(task.gate[0]), task.gate[1]) if task.gate is not None else None,
        )
        if task.release is not None:
            place(task.release)
        return DaskTask(self.name(task), remote.run_step, self.run, spec, *self._refs(list(places)))

    def _pack(self, task: Task) -> DaskTask:
        (source,) = self._refs(list(task.children))
        row = task_row(task)
        if task.making is not None:
            return DaskTask(self.name(task), remote.run_pick, self.run, row, task.making.reduction.name, source)
        reads = {read.field: read for read in task.phase.stage.reads}
        cuts = tuple(CutSpec(name, reads[name], tile, rim.offset) for name, rim, tile in task.cuts)
        return DaskTask(self.name(task), remote.run_pack, self.run, row, cuts, source)

    def _combine(self, task: Task) -> DaskTask:
        making = task.making
        assert making is not None
        spec = CombineSpec(
            row=task_row(task),
            stage=task.phase.stage.index,
            reduction=making.reduction.name,
            rows=making.rows,
            is_root=self.graph.root(making.instance) == task.number,
            has_previous=task.previous is not None,
        )
        numbers = [*task.children, *([task.previous] if task.previous is not None else [])]
        return DaskTask(self.name(task), remote.run_combine, self.run, spec, *self._refs(numbers))

    def _control(self, task: Task) -> DaskTask:
        refs = self._refs(list(task.children))
        return DaskTask(self.name(task), remote.run_control, self.run, task_row(task), *refs)
