"""A count up a tree of workers and a release down it, each worker by itself and all together."""

from __future__ import annotations

import random
from dataclasses import dataclass, field

import pytest

from breakstep.engine.resident.barriers import WORKER_ARITY, Barriers
from breakstep.engine.resident.cycles import Cycles
from breakstep.engine.resident.states import Exits, Instruction, SendItem, Waiter
from breakstep.graph.unroll import Phase
from tests.unit.engine.resident.hands import line, phase_like

PROGRAM = line()


@dataclass
class Post:
    """One worker's barriers, and what they have asked for."""

    worker: int = 0
    workers: int = 10
    satisfied: list[Waiter] = field(default_factory=list)
    out: list[Instruction] = field(default_factory=list)
    noted: list[tuple[str, int, tuple[int, ...]]] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.cycles = Cycles(0, 1, 0)
        exits = Exits(self.satisfied.append, self.out, self.note)
        self.barriers = Barriers(self.worker, self.workers, {0}, self.cycles, exits)

    def note(self, kind: str, phase: Phase, place: tuple[int, ...]) -> None:
        self.noted.append((kind, phase.number, place))

    def sent(self) -> list[tuple[int, tuple[object, ...]]]:
        """Items since the last look."""
        items = [(order.worker, order.key) for order in self.out if isinstance(order, SendItem)]
        self.out.clear()
        return items


def test_a_worker_reports_when_its_tasks_and_all_below_are_done() -> None:
    post = Post(worker=0)
    assert post.barriers.below == tuple(range(1, 9))
    post.barriers.emit(phase_like(PROGRAM), tasks=2)
    assert post.cycles.of(0).controls == 1
    waiter = Waiter()
    post.barriers.need(1, waiter)
    for worker in range(1, 9):
        post.barriers.count(1, worker)
    assert waiter.missing == 1
    assert post.sent() == []
    post.barriers.count(1, 0)
    assert post.satisfied == [waiter]
    assert post.sent() == [(worker, ("release", 1)) for worker in range(1, 9)]
    assert post.noted == [("count", 1, (0,)), ("release", 1, ())]
    assert post.cycles.of(0).controls == 0
    assert post.barriers.open == {}


def test_a_worker_in_the_middle_reports_up_and_passes_the_release_down() -> None:
    post = Post(worker=1)
    assert post.barriers.below == (9,)
    post.barriers.count(1, 9)  # ahead of this worker
    assert post.barriers.early == {1: {9}}
    post.barriers.emit(phase_like(PROGRAM), tasks=0)
    assert post.barriers.early == {}
    assert post.sent() == [(0, ("count", 1, 1))]
    post.barriers.release(1)
    assert post.sent() == [(9, ("release", 1))]


def test_what_comes_again_changes_nothing() -> None:
    post = Post(worker=1, workers=11)
    post.barriers.count(1, 9)
    post.barriers.count(1, 9)
    post.barriers.emit(phase_like(PROGRAM), tasks=1)
    for again in range(2):
        post.barriers.count(1, 9)
        post.barriers.count(1, 1)
        assert post.sent() == [], f"worker 10 has not reported, attempt {again}"
    post.barriers.count(1, 10)
    assert post.sent() == [(0, ("count", 1, 1))]
    post.barriers.count(1, 10)
    post.barriers.release(1)
    assert post.sent() == [(9, ("release", 1)), (10, ("release", 1))]
    post.barriers.release(1)
    post.barriers.count(1, 9)
    assert post.sent() == []
    assert post.barriers.open == post.barriers.early == {}
    assert post.cycles.of(0).controls == 0


def test_no_barrier_stands_behind_other_stages_nor_behind_released_ones() -> None:
    post = Post(workers=1)
    barriers = Barriers(0, 1, {7}, post.cycles, Exits(post.satisfied.append, post.out, post.note))
    barriers.emit(phase_like(PROGRAM), tasks=0)
    waiter = Waiter()
    barriers.need(1, waiter)
    assert waiter.missing == 0
    assert post.noted == []


@pytest.mark.parametrize("workers", [1, 2, 9, 10, 30, 100])
def test_all_workers_together_release_once_everybody_is_done(workers: int) -> None:
    generator = random.Random(workers)
    posts = [Post(worker, workers) for worker in range(workers)]
    moving: list[tuple[int, tuple[object, ...]]] = []
    for post in posts:
        post.barriers.emit(phase_like(PROGRAM), tasks=1)
    done = list(range(workers))
    generator.shuffle(done)
    for worker in done:
        assert not any(("release", 1, ()) in post.noted for post in posts)
        posts[worker].barriers.count(1, worker)
        moving += posts[worker].sent()
        while moving:
            to, key = moving.pop(generator.randrange(len(moving)))
            assert isinstance(key[1], int)
            if key[0] == "count":
                assert isinstance(key[2], int)
                posts[to].barriers.count(key[1], key[2])
            else:
                posts[to].barriers.release(key[1])
            moving += posts[to].sent()
    assert [post.noted for post in posts if post.worker] == [[("count", 1, (w,))] for w in range(1, workers)]
    assert posts[0].noted == [("count", 1, (0,)), ("release", 1, ())]
    assert all(not post.barriers.open for post in posts)
    assert all(len(post.barriers.below) <= WORKER_ARITY for post in posts)
