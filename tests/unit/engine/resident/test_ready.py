"""Order of ready tasks: cycle, then rank, then phase, then order of arrival; whole or by phase."""

from __future__ import annotations

import random

import pytest

from breakstep.engine.resident.ready import ReadyQueue
from breakstep.engine.resident.states import DONE, RUNNING, PhaseState, TaskState
from tests.unit.engine.resident.hands import line, phase_like

PROGRAM = line()


def phase(number: int, cycle: int = 0) -> PhaseState:
    return PhaseState(number, phase_like(PROGRAM, number=number, cycle=cycle))


def task(where: PhaseState, tile: int, rank: int = 0) -> TaskState:
    return TaskState(where, tile, (where.phase.cycle if where.phase else 0, -rank, where.number))


def test_cycle_goes_before_rank_before_phase_before_arrival() -> None:
    early, late, next_cycle = phase(5), phase(6), phase(7, cycle=1)
    tasks = [task(next_cycle, 0, rank=900), task(late, 1), task(early, 2), task(early, 3), task(late, 4, rank=10)]
    queue = ReadyQueue(by_phase=False)
    for one in tasks:
        queue.push(one)
    order = [queue.pop() for _ in tasks]
    assert [one.tile for one in order if one is not None] == [4, 2, 3, 1, 0]
    assert all(one is not None and one.state == RUNNING for one in order)
    assert queue.pop() is None


def test_one_phase_gives_its_most_urgent_and_no_other() -> None:
    first, second = phase(1), phase(2)
    queue = ReadyQueue(by_phase=True)
    for one in (task(first, 0), task(first, 1, rank=7), task(second, 2, rank=50)):
        queue.push(one)
    tiles = [one.tile for one in (queue.pop_from(first), queue.pop_from(first)) if one is not None]
    assert tiles == [1, 0]
    assert queue.pop_from(first) is None
    assert len(queue) == 1
    left = queue.pop()
    assert left is not None
    assert left.tile == 2


@pytest.mark.parametrize("seed", range(20))
def test_any_mixture_of_both_ways_gives_each_task_once(seed: int) -> None:
    """Against a plain list; leftovers never outnumber what is ready."""
    generator = random.Random(seed)
    phases = [phase(number, cycle=number // 3) for number in range(1, 7)]
    queue, plain, arrivals = ReadyQueue(by_phase=True), [], 0
    for _ in range(300):
        where = generator.choice(phases)
        if generator.random() < 0.45:
            arrivals += 1
            new = task(where, arrivals, generator.randrange(3))
            queue.push(new)
            plain.append((new.priority, arrivals, new))
            continue
        by_phase = generator.random() < 0.7
        wanted = min((entry for entry in plain if not by_phase or entry[2].where is where), default=None)
        got = queue.pop_from(where) if by_phase else queue.pop()
        assert got is (wanted[2] if wanted else None)
        if wanted is not None and got is not None:
            plain.remove(wanted)
            got.move(DONE)
        assert len(queue) == len(plain)
        assert {id(one) for one in queue.tasks()} == {id(one) for _, _, one in plain}
        assert len(queue._heap) <= 2 * len(queue)
