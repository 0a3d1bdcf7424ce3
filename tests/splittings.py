"""Random splittings for property tests, and what a classical code would do with them, step by step.

Kernels never run here: what is compared is who reads which version of which field, and which value.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field

import numpy as np
from hypothesis import strategies as st

from breakstep.graph.stages import RepeatStages, Stage, Template
from breakstep.graph.unroll import Making, Need, Phase, Unroller, ValueRef
from breakstep.steps.reduction import Combine, Reduction
from breakstep.steps.splitting import Item, Repeat, Splitting
from breakstep.steps.step import Array, Read, Step
from tests import toys

NAMES = ("a", "b", "c", "d")
Script = Mapping[tuple[int, int], list[bool]]  # (cycle, place among its repeats) -> verdict of each iteration


def says_stop(verdict: Array) -> bool:
    """Whether a scripted verdict is 1."""
    return bool(verdict[0] == 1.0)


@st.composite
def steps(draw: st.DrawFn, name: str, reductions: list[str]) -> Step:
    """A step with random reads, writes and uses."""
    fields = draw(st.lists(st.sampled_from(NAMES), min_size=1, max_size=3, unique=True))
    reads = tuple(
        Read(f, draw(st.sampled_from([(0, 0, 0), (0, 0, 0), (1, 0, 0), (1, 1, 0)])), draw(st.booleans()))
        for f in fields
    )
    writes = draw(st.lists(st.sampled_from(NAMES), min_size=1, max_size=2, unique=True))
    uses = draw(st.lists(st.sampled_from(reductions), unique=True)) if reductions else []
    return Step(name, toys.smooth, reads, tuple(writes), tuple(uses))


@st.composite
def splittings(draw: st.DrawFn) -> Splitting:
    """One or two orders of up to five steps and repeats, up to two reductions with lags."""
    reductions = [
        Reduction(f"r{i}", toys.rate, (Read(draw(st.sampled_from(NAMES))),), Combine.MAX, toys.as_it_is, lag)
        for i, lag in enumerate(draw(st.lists(st.integers(0, 2), max_size=2)))
    ]
    known = [reduction.name for reduction in reductions]
    pool: list[Item] = [draw(steps(f"s{i}", known)) for i in range(draw(st.integers(1, 4)))]
    for i in range(draw(st.integers(0, 2))):
        body = tuple(draw(steps(f"q{i}{j}", known)) for j in range(draw(st.integers(1, 2))))
        lag = draw(st.integers(0, 2))
        until = Reduction(f"v{i}", toys.rate, (Read(draw(st.sampled_from(NAMES))),), Combine.MAX, toys.as_it_is, lag)
        pool.append(Repeat(f"p{i}", body, until, says_stop, draw(st.integers(1 + lag, 6))))
    order = st.lists(st.sampled_from(pool), min_size=1, max_size=5)
    orders = draw(st.lists(order, min_size=1, max_size=2))
    return Splitting(tuple(tuple(o) for o in orders), tuple(reductions))


@st.composite
def scripts(draw: st.DrawFn, splitting: Splitting, cycles: int) -> Script:
    """Verdicts: any sequence, also ones that take a stop back; most hold a stop somewhere."""
    script = {}
    for cycle in range(cycles):
        order = splitting.orders[cycle % len(splitting.orders)]
        for place in range(sum(isinstance(item, Repeat) for item in order)):
            script[cycle, place] = [
                *draw(st.lists(st.booleans(), max_size=5)),
                draw(st.sampled_from([True, True, False])),
            ]
    return script


def verdict(script: Script, cycle: int, place: int, iteration: int) -> bool:
    """What an executed iteration measures."""
    sequence = script[cycle, place]
    return iteration < len(sequence) and sequence[iteration]


@dataclass
class Log:
    """What was executed: for each step or measurement its name, cycle, iteration, versions read, values used.

    A version is the number of the entry that wrote it, -1 for the initial state.
    """

    entries: list[tuple[str, int, int, dict[str, int], dict[str, int]]] = field(default_factory=list)
    converged: bool = True


def classical(splitting: Splitting, cycles: int, script: Script) -> Log:
    """A classical code: the order of the list, one thing after another."""
    log, versions = Log(), dict.fromkeys(NAMES, -1)

    def measure(reduction: Reduction, cycle: int, iteration: int) -> None:
        log.entries.append(
            (reduction.name, cycle, iteration, {r.field: versions[r.field] for r in reduction.reads}, {})
        )

    def advance(step: Step, cycle: int, iteration: int) -> None:
        read = {r.field: versions[r.field] for r in step.reads}
        log.entries.append((step.name, cycle, iteration, read, dict.fromkeys(step.uses, cycle)))
        versions.update(dict.fromkeys(step.writes, len(log.entries) - 1))

    def repeat_until_stop(repeat: Repeat, cycle: int, place: int) -> bool:
        left = repeat.at_most
        stopped = False
        for iteration in range(repeat.at_most):
            if left == 0:
                break
            for step in repeat.body:
                advance(step, cycle, iteration)
            measure(repeat.until, cycle, iteration)
            left -= 1
            if not stopped and verdict(script, cycle, place, iteration):
                stopped, left = True, min(left, repeat.until.lag)
        return stopped

    for reduction in splitting.reductions:
        measure(reduction, -1, -1)
    for cycle in range(cycles):
        place = 0
        for item in splitting.orders[cycle % len(splitting.orders)]:
            if isinstance(item, Step):
                advance(item, cycle, -1)
                continue
            if not repeat_until_stop(item, cycle, place):
                log.converged = False
                return log
            place += 1
        for reduction in splitting.reductions:
            measure(reduction, cycle, -1)
    return log


@dataclass
class Follower:
    """Plays the phases that an unroller emits, answers its needs, and keeps the same log.

    The value of a cycle-level reduction that cycle c must use is number c in the row of all results: those
    of the first measurement, one for each cycle up to the lag, then one a cycle.
    """

    unroller: Unroller
    script: Script
    log: Log = field(default_factory=Log)
    phases: list[Phase] = field(default_factory=list)
    executed: dict[int, bool] = field(default_factory=dict)  # phase -> whether it did not pass through
    _versions: dict[tuple[int, str], int] = field(default_factory=dict)
    _verdicts: dict[int, bool] = field(default_factory=dict)
    _rows: dict[tuple[int, int], int] = field(default_factory=dict)
    _counts: dict[str, int] = field(default_factory=dict)
    _place: int = -1

    def events(self) -> Iterator[Phase]:
        """Every phase, after it was played."""
        events, answer = self.unroller.run(), None
        while True:
            try:
                event = events.send(answer)
            except StopIteration:
                return
            if isinstance(event, Need):
                answer = [np.array([[float(self._verdicts[i])]]) for i in event.instances]
            else:
                answer = None
                self._play(event)
                yield event

    def _play(self, phase: Phase) -> None:
        if not self.phases or self.phases[-1].cycle != phase.cycle:
            self._place = -1
        self._place += phase.iteration == 0 and phase.stage.index in self._firsts()
        self.phases.append(phase)
        passes = phase.gate is not None and self._verdicts[phase.gate.instance]
        self.executed[phase.number] = not passes
        if passes:
            for name in phase.stage.writes:
                self._versions[phase.number, name] = self._version(phase, name)
        else:
            self._run(phase, phase.stage)
        for making in phase.makes:
            self._make(phase, making, passes)

    def _firsts(self) -> set[int]:
        nodes = (node for order in self.unroller.template.orders for node in order)
        return {node.stages[0].index for node in nodes if isinstance(node, RepeatStages)}

    def _version(self, phase: Phase, name: str) -> int:
        return self._versions.get((phase.sources[name], name), -1)

    def _run(self, phase: Phase, stage: Stage) -> None:
        at_hand = {name: self._version(phase, name) for name in phase.sources}
        for step in stage.steps:
            values = {name: self._row(phase.values[name]) for name in step.uses}
            read = {r.field: at_hand[r.field] for r in step.reads}
            self.log.entries.append((step.name, phase.cycle, phase.iteration, read, values))
            at_hand.update(dict.fromkeys(step.writes, len(self.log.entries) - 1))
        for reduction in stage.partials:
            read = {r.field: at_hand[r.field] for r in reduction.reads}
            self.log.entries.append((reduction.name, phase.cycle, phase.iteration, read, {}))
        for name in stage.writes:
            self._versions[phase.number, name] = at_hand[name]

    def _row(self, ref: ValueRef) -> int:
        return self._rows[ref.instance, ref.row]

    def _make(self, phase: Phase, making: Making, passes: bool) -> None:
        if phase.stage.repeat:
            before = making.previous is not None and self._verdicts[making.previous]
            fresh = not passes and verdict(self.script, phase.cycle, self._place, phase.iteration)
            self._verdicts[making.instance] = before or fresh
            return
        name = making.reduction.name
        for row in range(making.rows):
            self._rows[making.instance, row] = self._counts.get(name, 0)
            self._counts[name] = self._counts.get(name, 0) + 1


def follow(template: Template, cycles: int, script: Script, barriers: tuple[str, ...] = ()) -> Follower:
    """A follower of a new unroller."""
    return Follower(Unroller(template, cycles, barriers), script)
