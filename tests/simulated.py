"""A cluster without a cluster: the resident state machines of several workers, driven by a random schedule.

Messages between workers arrive after arbitrary delays, in any order and, if asked for, twice; threads look for work
when they like, and tasks and checkpoints take as long as they like. What a real cluster could do, this can. Some
schedules are unfair: each run draws how likely each kind of event is on each worker, over three decades.
"""

from __future__ import annotations

import random
from collections import deque
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from breakstep.engine.execute import execute
from breakstep.engine.program import Program
from breakstep.engine.resident.core import Core, CoreOptions, Finish, Instruction, Save, SendItem, SendRims, TaskState
from breakstep.engine.resident.inputs import cut_rims, inputs_of, site_of, worked_out
from breakstep.engine.resident.plan import WorkerPlan
from breakstep.engine.resident.wire import size_of
from breakstep.engine.run import RunOptions, unroller_for
from breakstep.steps.step import Array

Choice = tuple[str, int, Callable[[], bool]]  # kind of event, worker, what happens: whether anything did

DECADES = 3.0  # between the likeliest and the least likely kind of event


@dataclass(frozen=True)
class Beginning:
    """What a run begins with, when not with the initial state: a first cycle, a state, results of reductions."""

    cycle: int
    tiles: Mapping[int, Mapping[str, Array]]
    values: Sequence[Array]


@dataclass(eq=False)
class Message:
    """An item on its way."""

    sender: int
    worker: int
    key: tuple[Any, ...]
    payload: Any
    again: bool = False  # whether it has been delivered before
    nbytes: int = field(init=False)

    def __post_init__(self) -> None:
        self.nbytes = sum(size_of(self.payload).values())


def picture(thing: Any, seen: dict[int, int] | None = None) -> Any:
    """All that a state machine consists of, as nested tuples that can be compared.

    Objects of its own modules are opened up, each once; whatever else there is stands for itself.
    """
    seen = {} if seen is None else seen
    if isinstance(thing, int | float | str | bool | None):
        return thing
    if id(thing) in seen:
        return ("seen", seen[id(thing)])
    seen[id(thing)] = len(seen)
    if isinstance(thing, Mapping):
        return ("mapping", *((picture(k, seen), picture(v, seen)) for k, v in thing.items()))
    if isinstance(thing, list | tuple | deque):
        return ("sequence", *(picture(one, seen) for one in thing))
    if isinstance(thing, set | frozenset):
        return ("set", *sorted(map(repr, thing)))
    if type(thing).__module__.startswith("breakstep.engine.resident") and not isinstance(thing, WorkerPlan):
        return (type(thing).__name__, *((name, picture(value, seen)) for name, value in attributes(thing)))
    return ("other", id(thing))


def attributes(thing: object) -> list[tuple[str, Any]]:
    """Names and values of an object's own attributes, slots included."""
    slots = [name for kind in type(thing).__mro__ for name in getattr(kind, "__slots__", ())]
    return [*((name, getattr(thing, name)) for name in slots), *getattr(thing, "__dict__", {}).items()]


class SimulatedCluster:
    """Workers with ``threads`` threads each, and a bag of messages on their way.

    Parameters
    ----------
    repeats : float
        Share of the messages that are delivered a second time.
    after_each : callable
        Called with a worker's state machine after each of its events.

    Attributes
    ----------
    saved : dict of int to list of Save
        By cycle, what workers were told to save.
    order : list of (worker, phase, tile)
        Tasks as they were finished.
    """

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
        repeats: float = 0.0,
        begin: Beginning | None = None,
        after_each: Callable[[Core], None] = lambda core: None,
    ) -> None:
        self.program, self.threads, self.repeats, self.after_each = program, threads, repeats, after_each
        self.random = random.Random(seed)
        self.weights: dict[tuple[str, int], float] = {}
        start = 0 if begin is None else begin.cycle
        self.cores = []
        for worker in range(workers):
            plan = WorkerPlan(program, owners, worker)
            unroller = unroller_for(program, RunOptions(barriers=tuple(barriers), start=start))
            initial = {t: program.initial(t) if begin is None else begin.tiles[t] for t in plan.tiles}
            given = () if begin is None else begin.values
            self.cores.append(Core(plan, unroller, workers, options or CoreOptions(), initial, given))
        self.waiting = set(range(workers))  # workers that have not started
        self.running: list[list[TaskState]] = [[] for _ in range(workers)]
        self.moving: list[Message] = []
        self.saves: list[tuple[int, Save]] = []
        self.results: list[tuple[int, Finish]] = []
        self.saved: dict[int, list[Save]] = {}
        self.order: list[tuple[int, int, int]] = []
        self.steps = 0

    def run(self) -> dict[str, list[Array]]:
        """Run to the end; returns the final state by field and tile."""
        while not all(core.finished for core in self.cores):
            self.step()
        for message in self.moving:
            assert message.again, f"{message.key} is under way to {message.worker}, but the run is over"
        while self.moving:
            self.step()
        assert not self.saves
        assert not self.results
        final: dict[int, dict[str, Array]] = {}
        for core in self.cores:
            final.update(core.final())
        return {name: [final[t][name] for t in sorted(final)] for name in self.program.state_fields}

    def values(self) -> dict[str, Array]:
        """Last result of each cycle-level reduction."""
        core = self.cores[-1]
        return {name: core.values[instance] for name, instance in core.unroller.last_values().items()}

    # ---- the schedule ----------------------------------------------------------------------------

    def step(self) -> None:
        """One of the things that can happen does; to find that nothing can is to find a deadlock."""
        choices = self._choices()
        while choices:
            weights = [self._weight(kind, worker) for kind, worker, _ in choices]
            place = self.random.choices(range(len(choices)), weights)[0]
            if choices.pop(place)[2]():
                self.steps += 1
                return
        raise AssertionError("nothing can happen, but the run is not over")

    def _weight(self, kind: str, worker: int) -> float:
        return self.weights.setdefault((kind, worker), 10.0 ** -self.random.uniform(0.0, DECADES))

    def _choices(self) -> list[Choice]:
        choices: list[Choice] = [("start", w, lambda w=w: self._start(w)) for w in self.waiting]
        for worker, core in enumerate(self.cores):
            if len(self.running[worker]) < self.threads and core.ready_count:
                choices.append(("take", worker, lambda w=worker: self._take(w)))
            choices += [
                ("finish", worker, lambda w=worker, t=task: self._finish(w, t)) for task in self.running[worker]
            ]
        choices += [(m.key[0], m.worker, lambda m=m: self._deliver(m)) for m in self.moving]
        choices += [("saved", save[0], lambda s=save: self._saved(s)) for save in self.saves]
        choices += [("made", result[0], lambda r=result: self._made(r)) for result in self.results]
        return choices

    def _start(self, worker: int) -> bool:
        self.waiting.remove(worker)
        return self._obey(worker, self.cores[worker].start())

    def _take(self, worker: int) -> bool:
        core = self.cores[worker]
        task = core.take()
        if task is not None:
            self.running[worker].append(task)
        self.after_each(core)
        return task is not None

    def _finish(self, worker: int, task: TaskState) -> bool:
        core = self.cores[worker]
        self.running[worker].remove(task)
        output = execute(self.program, site_of(task), inputs_of(core, task))
        self.order.append((worker, task.phase.number, task.tile))
        core.measured(task, self.random.randrange(1, 1000))
        return self._obey(worker, core.finish(task, output.fields, output.partials))

    def _deliver(self, message: Message) -> bool:
        self.moving.remove(message)
        sender, core = self.cores[message.sender], self.cores[message.worker]
        if message.again:
            before = picture(core)
            assert core.arrive(message.key, message.payload) == [], f"{message.key} came again and had an effect"
            assert picture(core) == before, f"{message.key} came again and changed something"
            return True
        sender.in_flight(-message.nbytes)
        self.after_each(sender)
        if self.random.random() < self.repeats:
            message.again = True
            self.moving.append(message)
        return self._obey(message.worker, core.arrive(message.key, message.payload))

    def _saved(self, save: tuple[int, Save]) -> bool:
        self.saves.remove(save)
        return self._obey(save[0], self.cores[save[0]].saved(save[1].cycle))

    def _made(self, result: tuple[int, Finish]) -> bool:
        self.results.remove(result)
        worker, order = result
        return self._obey(worker, self.cores[worker].made(order, worked_out(self.program, order)))

    def _obey(self, worker: int, instructions: Sequence[Instruction]) -> bool:
        core = self.cores[worker]
        for order in instructions:
            if isinstance(order, SendRims):
                key = ("rims", order.phase, order.tile, order.source)
                self._post(Message(worker, order.worker, key, cut_rims(order, order.arrays)))
            elif isinstance(order, SendItem):
                self._post(Message(worker, order.worker, order.key, order.vector))
            elif isinstance(order, Finish):
                self.results.append((worker, order))
            else:
                self.saved.setdefault(order.cycle, []).append(order)
                self.saves.append((worker, order))
        self.after_each(core)
        return True

    def _post(self, message: Message) -> None:
        self.moving.append(message)
        self.cores[message.sender].in_flight(message.nbytes)
