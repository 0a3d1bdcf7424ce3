"""A cluster without a cluster: the resident state machines of several workers, driven by a random schedule.

Messages between workers arrive after arbitrary delays, and tasks finish in arbitrary order; what a real
cluster could do, this can. Items of one pair of workers may overtake each other.
"""

from __future__ import annotations

import random
from collections.abc import Callable, Sequence
from typing import Any

from breakstep.engine.execute import execute
from breakstep.engine.program import Program
from breakstep.engine.resident.core import Core, CoreOptions, Instruction, Save, SendItem, SendRims, TaskState
from breakstep.engine.resident.inputs import cut_rims, inputs_of, site_of
from breakstep.engine.resident.plan import WorkerPlan
from breakstep.engine.run import RunOptions, unroller_for
from breakstep.steps.step import Array


class SimulatedCluster:
    """Workers with ``threads`` threads each, and a bag of messages on their way."""

    def __init__(
        self,
        program: Program,
        owners: Sequence[int],
        workers: int,
        *,
        barriers: Sequence[str] = (),
        threads: int = 1,
        options: CoreOptions | None = None,
        seed: int = 0,
        after_each: Callable[[Core], None] = lambda core: None,
    ) -> None:
        self.program, self.threads, self.after_each = program, threads, after_each
        self.random = random.Random(seed)
        self.cores = []
        for worker in range(workers):
            plan = WorkerPlan(program, owners, worker)
            unroller = unroller_for(program, RunOptions(barriers=tuple(barriers)))
            initial = {tile: program.initial(tile) for tile in plan.tiles}
            self.cores.append(Core(plan, unroller, workers, options or CoreOptions(), initial))
        self.running: list[list[TaskState]] = [[] for _ in range(workers)]
        self.moving: list[tuple[int, tuple[Any, ...], Any]] = []
        self.saves: list[tuple[int, Save]] = []
        self.steps = 0

    def run(self) -> dict[str, list[Array]]:
        """Run to the end; returns the final state by field and tile."""
        for worker, core in enumerate(self.cores):
            self._obey(worker, core.start())
        while not all(core.finished for core in self.cores):
            choices = self._choices()
            assert choices, "nothing can happen, but the run is not over"
            self.random.choice(choices)()
            self.steps += 1
        final: dict[int, dict[str, Array]] = {}
        for core in self.cores:
            final.update(core.final())
        return {name: [final[t][name] for t in sorted(final)] for name in self.program.state_fields}

    def _choices(self) -> list[Callable[[], None]]:
        choices: list[Callable[[], None]] = []
        for worker, core in enumerate(self.cores):
            if len(self.running[worker]) < self.threads:
                task = core.take()
                if task is not None:
                    self.running[worker].append(task)
                    self._checked(core)
            choices += [lambda w=worker, t=task: self._finish(w, t) for task in self.running[worker]]
        choices += [lambda m=message: self._deliver(m) for message in self.moving]
        choices += [lambda s=save: self._saved(s) for save in self.saves]
        return choices

    def _finish(self, worker: int, task: TaskState) -> None:
        core = self.cores[worker]
        self.running[worker].remove(task)
        output = execute(self.program, site_of(task), inputs_of(core, task))
        self._obey(worker, core.finish(task, output.fields, output.partials, new=not output.skipped))

    def _deliver(self, message: tuple[int, tuple[Any, ...], Any]) -> None:
        self.moving = [other for other in self.moving if other is not message]
        worker, key, payload = message
        self._obey(worker, self.cores[worker].arrive(key, payload))

    def _saved(self, save: tuple[int, Save]) -> None:
        self.saves = [other for other in self.saves if other is not save]
        self._obey(save[0], self.cores[save[0]].saved(save[1].cycle))

    def _obey(self, worker: int, instructions: list[Instruction]) -> None:
        for order in instructions:
            if isinstance(order, SendRims):
                key = ("rims", order.phase, order.tile, order.source)
                self.moving.append((order.worker, key, cut_rims(order, order.arrays)))
            elif isinstance(order, SendItem):
                self.moving.append((order.worker, order.key, order.vector))
            else:
                self.saves.append((worker, order))
        self._checked(self.cores[worker])

    def _checked(self, core: Core) -> None:
        self.after_each(core)
