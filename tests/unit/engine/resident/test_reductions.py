"""Trees: what each worker keeps and sends, in whatever order parts come."""

from __future__ import annotations

import random
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pytest

from breakstep.engine.program import Program
from breakstep.engine.resident.inputs import worked_out
from breakstep.engine.resident.plan import WorkerPlan
from breakstep.engine.resident.reductions import Node, Reductions
from breakstep.engine.resident.results import Results
from breakstep.engine.resident.states import Exits, Finish, Instruction, SendItem, Waiter
from breakstep.graph.unroll import Making, Phase
from breakstep.steps.reduction import Combine, combine, finish_rows
from breakstep.steps.step import Array
from tests.mixtures import measured
from tests.unit.engine.resident.hands import SMOOTH, line, phase_like

KINDS = list(Combine)


@dataclass
class Worker:
    """One worker's trees, and what became of them."""

    program: Program
    owners: list[int]
    me: int
    workers: int
    out: list[Instruction] = field(default_factory=list)
    made: dict[int, Array] = field(default_factory=dict)
    noted: list[tuple[int, ...]] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.results = Results([], -1)
        exits = Exits(self.satisfy, self.out, lambda kind, phase, place: self.noted.append(place))
        plan = WorkerPlan(self.program, self.owners, self.me)
        self.trees = Reductions(plan, self.workers, self.results, exits, self.make)

    def satisfy(self, waiter: Waiter) -> None:
        waiter.missing -= 1
        if waiter.missing == 0:
            assert isinstance(waiter, Node)
            self.trees.combine(waiter)
            for order in [order for order in self.out if isinstance(order, Finish)]:
                self.out.remove(order)
                self.trees.finished(order, worked_out(self.program, order))

    def make(self, instance: int, vector: Array) -> None:
        self.made[instance] = vector
        for waiter in self.results.put(instance, vector)[0]:
            self.satisfy(waiter)

    def open(self, making: Making, phase: Phase) -> None:
        self.results.announce(making.instance, phase.cycle)
        self.trees.open(making, phase)

    def sent(self) -> list[SendItem]:
        items = [order for order in self.out if isinstance(order, SendItem)]
        self.out.clear()
        return items


def program_with(kind: Combine, tiles: int) -> Program:
    return line([SMOOTH], tiles=tiles, reductions=[measured("sum", "a", kind)])


def making_of(program: Program, instance: int = 0, previous: int | None = None, rows: int = 1) -> Making:
    return Making(program.problem.splitting.reductions[0], instance, previous, rows)


def serially(making: Making, parts: list[Any], previous: Array | None = None) -> Array:
    """The same tree, one level after another."""
    while True:
        parts = [combine(making.reduction.combine, parts[i : i + 8]) for i in range(0, len(parts), 8)]
        if len(parts) == 1:
            return finish_rows(making.reduction, parts[0], previous, making.rows)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("workers", [1, 3])
def test_any_order_of_parts_gives_the_same_bits(kind: Combine, workers: int) -> None:
    """Sums of 20 random numbers, some of them absent, on one worker or three; every item arrives twice."""
    program = program_with(kind, 20)
    making, phase = making_of(program), phase_like(program)
    expected = None
    for seed in range(8):
        generator = random.Random(seed)
        owners = [generator.randrange(workers) for _ in range(20)]
        numbers = np.random.default_rng(5)
        parts = [None if tile % 7 == 3 else numbers.normal(size=2) for tile in range(20)]
        every = [Worker(program, owners, me, workers) for me in range(workers)]
        late = generator.randrange(workers)  # emits the phase when others have sent their parts
        for worker in every:
            if worker.me != late:
                worker.open(making, phase)
        moving: list[SendItem] = []
        for tile in generator.sample(range(20), 20):
            if owners[tile] != late:
                every[owners[tile]].trees.part(0, 0, tile, parts[tile])
                moving += 2 * every[owners[tile]].sent()
        early = [item for item in moving if item.worker == late]
        for item in early:
            every[late].trees.part(*item.key[1:], item.vector)
        assert every[late].made == {}
        every[late].open(making, phase)
        assert every[late].trees.early == {}
        for tile in generator.sample(range(20), 20):
            if owners[tile] == late:
                every[late].trees.part(0, 0, tile, parts[tile])
        moving += 2 * every[late].sent()
        values: list[SendItem] = []
        while moving:
            item = moving.pop(generator.randrange(len(moving)))
            if item.key[0] == "value":
                values.append(item)
                continue
            every[item.worker].trees.part(*item.key[1:], item.vector)
            moving += 2 * every[item.worker].sent()
        (result,) = [worker.made[0] for worker in every if worker.made]
        expected = serially(making, parts) if expected is None else expected
        assert np.array_equal(result, expected)
        assert sorted(item.worker for item in values) == sorted(2 * [w for w in range(workers) if w != owners[0]])
        assert sorted(place for worker in every for place in worker.noted) == [
            (0, 0, 0),
            (0, 0, 1),
            (0, 0, 2),
            (0, 1, 0),
        ]
        assert not any(worker.trees.nodes or worker.trees.early for worker in every)


def test_the_root_waits_for_the_result_before_its_own() -> None:
    program = program_with(Combine.SUM, 2)
    worker, phase = Worker(program, [0, 0], 0, 2), phase_like(program)
    first, second = making_of(program, 0, rows=2), making_of(program, 1, previous=0)
    worker.open(first, phase)
    worker.open(second, phase)
    for tile in (0, 1):
        worker.trees.part(1, 0, tile, np.array([1.0, 2.0]))
    assert worker.made == {}
    for tile in (0, 1):
        worker.trees.part(0, 0, tile, np.array([3.0, 4.0]))
    assert list(worker.made) == [0, 1]
    assert worker.made[0].shape == (2, 2)
    expected = serially(second, [np.array([1.0, 2.0])] * 2, worker.made[0][-1])
    assert np.array_equal(worker.made[1], expected)


def test_a_part_that_comes_again_after_its_node_is_combined_is_dropped() -> None:
    program = program_with(Combine.SUM, 2)
    worker = Worker(program, [0, 1], 0, 2)
    worker.open(making_of(program), phase_like(program))
    for tile in (0, 1, 1, 0):
        worker.trees.part(0, 0, tile, np.array([1.0, float(tile)]))
    assert len(worker.made) == 1
    assert worker.noted == [(0, 0, 0)]
    assert worker.trees.nodes == worker.trees.early == {}
