"""A scene: one program on one setting, played under any choice of barriers.

How crowded a node is depends on how busy its threads are, which only a replay tells; so a replay is repeated
with the crowding that the one before found, a few times.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property

import numpy as np

from breakstep.forecast.basis import ROUNDS, Basis
from breakstep.forecast.bounds import lower_bounds
from breakstep.forecast.crowd import Load, kernel_stretch
from breakstep.forecast.dynamic import replay_owner
from breakstep.forecast.fixed import Schedule, replay_fixed
from breakstep.forecast.graph import BARRIER, REDUCTION, STEP, Int32s, Int64s, ReplayGraph
from breakstep.forecast.machines import Machine
from breakstep.forecast.memory import high_water
from breakstep.forecast.program import CostTables, Floats, Program
from breakstep.forecast.question import Question
from breakstep.forecast.results import Replay
from breakstep.forecast.retile import overhead_factor
from breakstep.forecast.setting import Setting, changed_program, owners_of, setting_of
from breakstep.forecast.unfold import Unfolded, unfold
from breakstep.forecast.urgency import ranks

MOST_RUNS = 8  # recorded runs that are played apart


@dataclass
class Scene:
    """One program on one setting.

    Attributes
    ----------
    program : Program
    setting : Setting
    question : Question
    tile_owner : ndarray of int32, shape (tiles,)
    runs : tuple of (str, CostTables)
        Mode and costs of each recorded run, for the same phases and tiles.
    """

    program: Program
    setting: Setting
    question: Question
    tile_owner: Int32s
    runs: tuple[tuple[str, CostTables], ...] = ()
    _stretch: dict[int, Floats] = field(default_factory=dict)

    @classmethod
    def of(cls, basis: Basis, machine: Machine, question: Question, workers: int) -> Scene:
        """The scene that a question asks for.

        Raises
        ------
        ForecastError
            The question does not fit the program.
        """
        program = changed_program(basis.program, question)
        larger = overhead_factor(basis.program.tiles, program.tiles)
        setting = setting_of(basis, machine, question, workers, larger)
        runs = tuple(
            (run.mode, changed_program(replace(basis.program, costs=costs), question).costs)
            for run, costs in zip(basis.runs, basis.tables, strict=True)
        )
        return cls(program, setting, question, owners_of(basis, program, question, workers), runs)

    @cached_property
    def unfolded(self) -> Unfolded:
        """The program's graph; its durations are filled in for each replay."""
        return unfold(self.program, np.zeros((len(self.program.phases), self.program.tile_count)))

    @cached_property
    def owner(self) -> Int32s:
        """Worker of each node."""
        return self.unfolded.graph.owners(self.tile_owner)

    @cached_property
    def rank(self) -> Int32s | None:
        """Order of urgency of each node, by costs on an idle machine."""
        if self.question.priority == "program":
            return None
        return ranks(self.unfolded, self.tile_owner, self._by_phase(self._calm))

    def graph(self, kinds: int, noise: Floats | float = 1.0) -> ReplayGraph:
        """The graph with the durations that it has under a choice of barriers.

        Parameters
        ----------
        noise : float or ndarray of float64, shape (phases, tiles)
            Factor on durations.
        """
        if kinds not in self._stretch:
            self._stretch[kinds] = self._crowded(kinds)
        return self._with(self._stretch[kinds], noise)

    def play(self, kinds: int, noise: Floats | float = 1.0) -> Replay:
        """Replay with the order that workers find while playing."""
        return self._replayed(self.graph(kinds, noise), kinds)

    def expected_ns(self, kinds: int) -> float:
        """Mean makespan over the costs of recorded runs, those of the same mode if there are any [ns].

        Not the makespan of mean costs: a barrier waits for whichever task was slow in that run, and means hide that.
        Of the same mode, because what slows tasks down depends a little on the mode, and no model of it is exact.
        """
        return float(np.mean([self._replayed(graph, kinds).makespan_ns for graph in self._graphs(kinds)]))

    def kept_ns(self, before: int, kinds: int) -> float:
        """The same with the order and the durations of another choice of barriers: taking some away then cannot
        lengthen it [ns]."""
        found = []
        for graph in self._graphs(before):
            schedule = Schedule.of(self._replayed(graph, before))
            found.append(replay_fixed(graph, self.setting.model, schedule, kinds).makespan_ns)
        return float(np.mean(found))

    def bounds(self, kinds: int) -> dict[str, float]:
        """By kind of bound, what no schedule that keeps tiles with their owners goes below, on average [ns]."""
        found = [lower_bounds(graph, self.setting.model, self.owner, kinds) for graph in self._graphs(kinds)]
        return {
            "area": float(np.mean([bounds.area_ns for bounds in found])),
            "path": float(np.mean([bounds.path_ns for bounds in found])),
            "worker": float(np.mean([bounds.worker_ns for bounds in found])),
        }

    def least_ns(self, kinds: int, slots: int) -> float:
        """What no order and no placement on so many threads goes below, for the runs played in a mode [ns].

        Costs are those of an idle machine, and messages and trees of workers cost nothing. Of a scene with one worker,
        which pays least for its interpreter, this is a bound for any number of workers, and more never raise it.
        """
        free = replace(self.setting.model, workers=slots, threads=1, alpha_ns=0, hop_ns=0)
        graphs = [self._with(self._calm, 1.0, costs) for costs in self._chosen(kinds)]
        return float(np.mean([lower_bounds(graph, free, None, self.unfolded.tasked).best_ns for graph in graphs]))

    def work_ns(self, kinds: int) -> float:
        """Time in kernels on an idle machine, all tasks together, of the runs that the makespan is made from [ns]."""
        return float(np.mean([self._kernels(self._calm, costs).sum() for costs in self._chosen(kinds)]))

    def _chosen(self, kinds: int) -> list[CostTables]:
        mode = {self.unfolded.lockstep: "lockstep", self.unfolded.tasked: "tasked"}.get(kinds, "")
        same = [costs for run_mode, costs in self.runs if run_mode == mode]
        return (same or [costs for _, costs in self.runs] or [self.program.costs])[:MOST_RUNS]

    def _graphs(self, kinds: int) -> list[ReplayGraph]:
        stretch = self.stretch(kinds)
        return [self._with(stretch, 1.0, costs) for costs in self._chosen(kinds)]

    def _replayed(self, graph: ReplayGraph, kinds: int) -> Replay:
        return replay_owner(graph, self.setting.model, self.owner, self.rank, kinds)

    def memory(self, replay: Replay) -> int:
        """Most bytes that one worker holds at once [bytes]."""
        return int(high_water(self.unfolded.graph, self.setting.model, replay).max(initial=0))

    def stretch(self, kinds: int) -> Floats:
        """How many times as long kernels take on each worker as on an idle machine."""
        self.graph(kinds)
        return self._stretch[kinds]

    def step_ns(self, kinds: int) -> Floats:
        """Duration of each step task under a choice of barriers, shape (phases, tiles) [ns]."""
        return self._by_phase(self.stretch(kinds))

    def kernel_ns(self, kinds: int) -> float:
        """Time in kernels under a choice of barriers, crowding included, all tasks together [ns]."""
        return float(self._kernels(self.stretch(kinds), self.program.costs).sum())

    @property
    def _calm(self) -> Floats:
        return np.ones(self.setting.model.workers)

    def _crowded(self, kinds: int) -> Floats:
        setting, model = self.setting, self.setting.model
        stretch, work = self._calm, float(self._by_phase(self._calm).sum())
        for _ in range(ROUNDS):
            replay = self._replayed(self._with(stretch, 1.0), kinds)
            busy = replay.busy_ns / max(model.threads * replay.makespan_ns, 1)
            load = Load(busy, model.threads, setting.cores, setting.nodes, work, self._messages(kinds))
            stretch = kernel_stretch(load, setting.dispatch)
        return stretch

    def _with(self, stretch: Floats, noise: Floats | float, costs: CostTables | None = None) -> ReplayGraph:
        durations = self.unfolded.durations(self._by_phase(stretch, costs) * noise)
        graph = self.unfolded.graph
        durations[graph.kind == BARRIER] = self.setting.local_turn_ns
        return graph.with_durations(durations)

    def _by_phase(self, stretch: Floats, costs: CostTables | None = None) -> Floats:
        setting, costs = self.setting, costs or self.program.costs
        python = (costs.surface + setting.rest * costs.rest) * setting.python / setting.speed
        return self._kernels(stretch, costs) + python[self._rows]

    def _kernels(self, stretch: Floats, costs: CostTables) -> Floats:
        """Kernels of each step task, shape (phases, tiles) [ns]."""
        crowded = stretch[self.tile_owner] / self.setting.speed
        total = np.zeros_like(costs.rest)
        for step, values in costs.kernel.items():
            slower = 1.0 / self.setting.speed if step in self.program.timed else crowded
            total += values * slower * self.question.factors.get(step, 1.0)
        return np.asarray(total[self._rows])

    @cached_property
    def _rows(self) -> list[int]:
        return [phase.cost for phase in self.program.phases]

    def _messages(self, kinds: int) -> float:
        """Transfers that take processor time from tasks."""
        if kinds == self.unfolded.lockstep:
            return self.data_messages
        return self.data_messages + self.control_messages

    @cached_property
    def data_messages(self) -> float:
        """Transfers of tile data: what a task makes goes once to each other worker."""
        pairs = crossing(self.unfolded.graph, self.owner)
        return float(len(np.unique(pairs)))

    @cached_property
    def control_messages(self) -> float:
        """Transfers of partial and whole results, without barriers."""
        workers = self.setting.model.workers
        made = int(np.sum(self.unfolded.graph.kind == REDUCTION))
        return float(made * (tree_messages(self.tile_owner) + workers - 1))


def crossing(graph: ReplayGraph, owner: Int32s) -> Int64s:
    """For each data edge between workers, one number for its producer and receiver."""
    consumer = graph.consumer
    steps = (graph.kind[graph.producer] == STEP) & (graph.kind[consumer] == STEP)
    producer, receiver = graph.producer[steps].astype(np.int64), owner[consumer[steps]].astype(np.int64)
    crosses = owner[producer] != receiver
    return np.asarray(producer[crosses] * (int(owner.max(initial=0)) + 1) + receiver[crosses])


def tree_messages(tile_owner: Int32s, arity: int = 8) -> int:
    """Parts of one result that cross workers on their way up the tree, whose nodes lie with their first child."""
    level, found = np.asarray(tile_owner), 0
    while len(level) > 1:
        home = np.repeat(level[::arity], arity)[: len(level)]
        found += int(np.sum(level != home))
        level = level[::arity]
    return found


def by_stage(program: Program, pools: Mapping[str, Floats], draw: np.random.Generator) -> Floats:
    """A factor for each step task drawn from its stage's pool, shape (phases, tiles)."""
    tiles = program.tile_count
    return np.stack([draw.choice(pools[phase.stage], size=tiles) for phase in program.phases])
