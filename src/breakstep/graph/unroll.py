"""Unrolling: from the stages of a splitting to the phases of a run, one at a time.

A phase is one stage in one cycle (and iteration); it stands for one task a tile. Data dependencies come
from Bernstein's conditions on the declared reads and writes. Every task makes new arrays, so a write never
overtakes a reader of the version before: write-after-read and write-after-write conflicts are gone by
renaming, and what remains is read-after-write: each read of a field goes to the phase that wrote it last
in program order.

What happens next can depend on a value: iterations end when a verdict says so, a run when its time is up.
The generator then yields :class:`Need` and goes on when the value is sent in. What it emits depends on
those values alone, never on timing. Iterations up to the number that the cycle before needed are emitted
without waiting; one that turns out to be superfluous passes its fields through.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Generator, Iterable, Sequence
from dataclasses import dataclass, field
from typing import TypeAlias

from breakstep.errors import ConvergenceError
from breakstep.graph.stages import RepeatStages, Stage, Template
from breakstep.steps.calling import ask_user
from breakstep.steps.reduction import Reduction
from breakstep.steps.step import Array

INITIAL = 0  # number of the phase that stands for the initial state


@dataclass(frozen=True)
class ValueRef:
    """One row of one reduction's result: ``instance`` counts results over the run."""

    instance: int
    row: int = 0


@dataclass(frozen=True)
class Making:
    """A reduction made at the end of a phase: its result has ``rows`` rows, each finished from the one before."""

    reduction: Reduction
    instance: int
    previous: int | None
    rows: int = 1


@dataclass(frozen=True)
class Phase:
    """One stage of one cycle (and iteration), for all tiles.

    Attributes
    ----------
    number : int
        Program order; the initial state is 0.
    sources : dict of str to int
        For each field read, the phase that wrote the version to read.
    values : dict of str to ValueRef
        For each reduction used, the result to use.
    gate : ValueRef or None
        Verdict that turns the phase into a pass-through.
    makes : tuple of Making
    waits_for : int or None
        Newest phase before this one behind which a barrier stands.
    """

    number: int
    stage: Stage
    cycle: int
    iteration: int = -1
    sources: dict[str, int] = field(default_factory=dict)
    values: dict[str, ValueRef] = field(default_factory=dict)
    gate: ValueRef | None = None
    makes: tuple[Making, ...] = ()
    waits_for: int | None = None


@dataclass(frozen=True)
class Need:
    """The unrolling waits for the results of these reduction instances, to be sent as a list."""

    instances: tuple[int, ...]


Unrolling: TypeAlias = Generator[Phase | Need, list[Array] | None, None]


class CycleResults:
    """Instances of one cycle-level reduction, counted from the first; only as many are kept as its lag reaches back.

    A cycle uses the result made ``lag`` cycles before it, and by its last phase its own is made: that is ``lag`` + 2.
    """

    def __init__(self, lag: int) -> None:
        self.kept: deque[int] = deque(maxlen=lag + 2)
        self.count = 0

    def append(self, instance: int) -> None:
        """One more has been announced."""
        self.kept.append(instance)
        self.count += 1

    def newest(self) -> int | None:
        """The last one, if there is any."""
        return self.kept[-1] if self.kept else None

    def __getitem__(self, index: int) -> int:
        """One of those that are kept, by its place among all."""
        return self.kept[index - (self.count - len(self.kept))]


@dataclass
class Unroller:
    """Generates the phases of a run.

    Parameters
    ----------
    template : Template
    cycles : int
        Most cycles to run.
    barriers : sequence of str
        Names of the barriers that are on.
    ended : callable, optional
        ``ended(value of the first reduction for a cycle) -> bool``: stop before that cycle.
        Costs a look at each cycle's value before the cycle is emitted.
    start : int
        First cycle to run; above 0 the run goes on from a state in which that cycle had not begun. Results of
        cycle-level reductions for cycles ``start`` to ``start`` + lag must then be given to the engine as the
        rows of instance 0, 1, ... in the order of the splitting's reductions.
    """

    template: Template
    cycles: int
    barriers: Sequence[str] = ()
    ended: Callable[[Array], bool] | None = None
    start: int = 0

    def __post_init__(self) -> None:
        self._barrier_stages = self.template.stages_with_barrier(self.barriers)
        self._phase_count = 1
        self._instance_count = 0
        self._latest: dict[str, int] = {}
        self._written_in: dict[str, int] = {}  # field -> cycle of its newest version
        self._last_phase: Phase | None = None
        self._barred: int | None = None  # newest phase behind which a barrier stands
        self._cycle_results = {r.name: CycleResults(r.lag) for r in self.template.splitting.reductions}
        self._verdicts: list[int] = []  # instances of the repeat under way, by iteration
        self._iterations: dict[str, int] = {}

    def live_phases(self, state: Iterable[str]) -> frozenset[int]:
        """Phases that a phase still to be emitted may read, and those that hold the newest state.

        Parameters
        ----------
        state : iterable of str
            Fields that are kept whatever reads them.
        """
        now = self._last_phase.cycle if self._last_phase is not None else -1
        passing = {name for name, cycle in self._written_in.items() if cycle == now}
        return frozenset(self.latest(name) for name in {*state, *self.template.carried, *passing})

    def live_instances(self) -> frozenset[int]:
        """Results that a phase or a need still to come may name, and the last ones made."""
        return frozenset(self._verdicts).union(*(made.kept for made in self._cycle_results.values()))

    @property
    def barred(self) -> int | None:
        """Newest phase behind which a barrier stands: what comes waits for it alone."""
        return self._barred

    def latest(self, name: str) -> int:
        """The phase that wrote a field last."""
        return self._latest.get(name, INITIAL)

    def iterations(self, repeat: str) -> int:
        """How many iterations the repeat executed in the last cycle."""
        return self._iterations.get(repeat, 0)

    def last_values(self) -> dict[str, int]:
        """For each cycle-level reduction, the newest result's instance."""
        newest = {name: made.newest() for name, made in self._cycle_results.items()}
        return {name: instance for name, instance in newest.items() if instance is not None}

    def next_values(self) -> dict[str, list[ValueRef]]:
        """For each cycle-level reduction, the results for the next cycle and its lag.

        Meaningful between two cycles only; in the middle of one, results still to be made are left out.
        """
        upcoming = self.start if self._last_phase is None else self._last_phase.cycle + 1
        return {
            reduction.name: [
                self._cycle_value(reduction, upcoming + k)
                for k in range(reduction.lag + 1)
                if max(upcoming + k - self.start - reduction.lag, 0) < self._cycle_results[reduction.name].count
            ]
            for reduction in self.template.splitting.reductions
        }

    def run(self) -> Unrolling:
        """Yield phases in program order, and needs where a value decides."""
        if self.start > 0:
            self._cycle_makings(first=True)  # their results come from the checkpoint
        elif self.template.start is not None:
            yield self._phase(self.template.start, -1, makes=self._cycle_makings(first=True))
        for cycle in range(self.start, self.cycles):
            if self.ended is not None:
                ref = self._cycle_value(self.template.splitting.reductions[0], cycle)
                answer = yield Need((ref.instance,))
                assert answer is not None
                if ask_user(self.ended, answer[0][ref.row], where=f"ended before cycle {cycle}"):
                    return
            yield from self._cycle(cycle)

    def _cycle(self, cycle: int) -> Unrolling:
        nodes = self.template.orders[cycle % len(self.template.orders)]
        for place, node in enumerate(nodes):
            if isinstance(node, RepeatStages):
                yield from self._repeat(node, cycle)
            else:
                last = place == len(nodes) - 1
                yield self._phase(node, cycle, makes=self._cycle_makings() if last else ())

    def _cycle_makings(self, first: bool = False) -> tuple[Making, ...]:
        makings = []
        for reduction in self.template.splitting.reductions:
            made = self._cycle_results[reduction.name]
            making = Making(
                reduction,
                self._next_instance(),
                made.newest(),
                1 + reduction.lag if first else 1,
            )
            made.append(making.instance)
            makings.append(making)
        return tuple(makings)

    def _cycle_value(self, reduction: Reduction, cycle: int) -> ValueRef:
        """The first result has a row for each of the first ``lag`` + 1 cycles."""
        made, since = self._cycle_results[reduction.name], cycle - self.start
        return ValueRef(made[0], since) if since <= reduction.lag else ValueRef(made[since - reduction.lag])

    def _repeat(self, node: RepeatStages, cycle: int) -> Unrolling:
        repeat, lag = node.repeat, node.repeat.until.lag
        foreseen = min(repeat.at_most, self._iterations.get(repeat.name, 1 + lag))
        verdicts = self._verdicts = []
        known: int = 0
        stopped_at: int | None = None
        last: Array | None = None
        while stopped_at is None:
            iteration = len(verdicts)
            if iteration < repeat.at_most and (iteration < foreseen or iteration - 1 - lag < known):
                gate = ValueRef(verdicts[iteration - 1 - lag]) if iteration > lag else None
                yield from self._iteration(node, cycle, iteration, verdicts, gate)
                continue
            if known == len(verdicts):
                assert last is not None
                raise _not_converged(node, cycle, last)
            # No later verdict than gates the next iteration: those that the lag allows are out already.
            wanted = iteration - lag if iteration < repeat.at_most else iteration
            answer = yield Need(tuple(verdicts[known:wanted]))
            assert answer is not None
            for value in answer:
                last = value
                where = f"stop of repeat {repeat.name}, cycle {cycle}"
                if stopped_at is None and ask_user(repeat.stop, value[0], where=where):
                    stopped_at = known
                known += 1
        self._iterations[repeat.name] = min(stopped_at + lag + 1, repeat.at_most)
        self._verdicts = []

    def _iteration(
        self, node: RepeatStages, cycle: int, iteration: int, verdicts: list[int], gate: ValueRef | None
    ) -> Unrolling:
        for stage in node.stages:
            makes: tuple[Making, ...] = ()
            if stage.partials:
                previous = verdicts[-1] if verdicts else None
                makes = (Making(node.repeat.until, self._next_instance(), previous),)
                verdicts.append(makes[0].instance)
            yield self._phase(stage, cycle, iteration, makes, gate)

    def _phase(
        self,
        stage: Stage,
        cycle: int,
        iteration: int = -1,
        makes: tuple[Making, ...] = (),
        gate: ValueRef | None = None,
    ) -> Phase:
        reductions = {r.name: r for r in self.template.splitting.reductions}
        phase = Phase(
            number=self._phase_count,
            stage=stage,
            cycle=cycle,
            iteration=iteration,
            sources={read.field: self.latest(read.field) for read in stage.reads},
            values={name: self._cycle_value(reductions[name], cycle) for name in stage.uses},
            gate=gate,
            makes=makes,
            waits_for=self._barred,
        )
        self._phase_count += 1
        self._latest.update(dict.fromkeys(stage.writes, phase.number))
        self._written_in.update(dict.fromkeys(stage.writes, cycle))
        self._last_phase = phase
        if stage.index in self._barrier_stages:
            self._barred = phase.number  # everything after stands behind it, whatever lies between
        return phase

    def _next_instance(self) -> int:
        self._instance_count += 1
        return self._instance_count - 1


def _not_converged(node: RepeatStages, cycle: int, value: Array) -> ConvergenceError:
    figures = ", ".join(f"{x:.3g}" for x in value[0])
    return ConvergenceError(
        f"{node.repeat.name} did not converge in cycle {cycle}: after {_iterations(node.repeat.at_most)} its"
        f" {node.repeat.until.name} is {figures}; allow more iterations, relax the tolerance or lower the time step",
        repeat=node.repeat.name,
        cycle=cycle,
        value=[float(x) for x in value[0]],
    )


def _iterations(count: int) -> str:
    return "1 iteration" if count == 1 else f"{count} iterations"
