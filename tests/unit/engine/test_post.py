"""The post between workers, with a made-up connection: batching, numbering, retries, giving up."""

from __future__ import annotations

import asyncio
from collections.abc import Callable, Coroutine
from typing import Any

import numpy as np
import pytest

from breakstep.engine.resident import post
from breakstep.engine.resident.post import SEND_ATTEMPTS, Post
from breakstep.engine.resident.wire import Item, Parcel


class Line:
    """A connection that keeps what it is given, and fails or dawdles when told to."""

    def __init__(self) -> None:
        self.sent: list[tuple[int, int, list[Item]]] = []
        self.fails: list[BaseException] = []
        self.open = asyncio.Event()
        self.open.set()

    async def send(self, worker: int, number: int, parcel: Parcel) -> None:
        """Deliver, then perhaps fail all the same: the sender cannot tell."""
        await self.open.wait()
        self.sent.append((worker, number, parcel.items))
        if self.fails:
            raise self.fails.pop(0)


class Office:
    """A post and what it has told."""

    def __init__(self, workers: int = 3) -> None:
        self.line = Line()
        self.bytes: list[int] = []
        self.lost: list[tuple[int, Exception]] = []
        self.post = Post(
            asyncio.get_running_loop(),
            workers,
            self.line.send,
            self.bytes.append,
            lambda worker, error: self.lost.append((worker, error)),
        )

    async def settle(self) -> None:
        """Until all is delivered or lost."""
        for _ in range(1000):
            await asyncio.sleep(0.001)
            if self.post.empty() or self.lost:
                return
        raise AssertionError("the post does not come to rest")


def rim(value: float, zones: int = 4) -> Item:
    """An item with one array."""
    return ("rims", 1, 0, 0), {("u", 0, (1, 0, 0)): np.full((1, zones, 1, 1), value)}


def in_loop(test: Callable[[], Coroutine[Any, Any, None]]) -> Callable[[], None]:
    """Run a coroutine as a test."""

    def run() -> None:
        asyncio.run(test())

    return run


@pytest.fixture(autouse=True)
def no_waiting(monkeypatch: pytest.MonkeyPatch) -> None:
    """Retries follow at once."""
    monkeypatch.setattr(post, "RETRY_SECONDS", 0.0)


@in_loop
async def test_items_arrive_in_order_at_whom_they_are_for() -> None:
    office = Office()
    office.post.put([(1, rim(1.0)), (2, rim(2.0)), (1, rim(3.0))])
    await office.settle()
    values = [(worker, [next(iter(a.values()))[0, 0, 0, 0] for _, a in items]) for worker, _, items in office.line.sent]
    assert sorted(values) == [(1, [1.0, 3.0]), (2, [2.0])]
    assert sum(office.bytes) == 0
    assert max(office.bytes) == 3 * 32  # bytes under way: three rims of four numbers


@in_loop
async def test_what_piles_up_goes_in_one_message() -> None:
    office = Office()
    office.line.open.clear()
    office.post.put([(1, rim(0.0))])
    await asyncio.sleep(0.01)  # the sender takes it along
    for value in range(4):
        office.post.put([(1, rim(value))])
    assert not office.post.empty()
    office.line.open.set()
    await office.settle()
    assert [(number, len(items)) for _, number, items in office.line.sent] == [(1, 1), (2, 4)]


@in_loop
async def test_a_message_is_not_too_large() -> None:
    office = Office()
    large = post.PARCEL_BYTES // 8 // 2 - 10  # zones: two fit, three do not
    office.post.put([(1, rim(1.0, large))] * 3 + [(1, rim(2.0, 3 * large)), (1, (("count", 7), None))])
    await office.settle()
    assert [len(items) for _, _, items in office.line.sent] == [2, 1, 1, 1]


@in_loop
async def test_a_failed_message_goes_again_under_its_number() -> None:
    office = Office()
    office.line.fails = [OSError("reset"), TimeoutError("late")]
    office.post.put([(1, rim(1.0))])
    await office.settle()
    office.post.put([(1, rim(2.0))])
    await office.settle()
    assert [number for _, number, _ in office.line.sent] == [1, 1, 1, 2]
    assert office.lost == []
    assert sum(office.bytes) == 0


@in_loop
async def test_a_line_that_fails_for_ever_is_told_once() -> None:
    office = Office()
    office.line.fails = [OSError("no route")] * 99
    office.post.put([(2, rim(1.0))])
    await office.settle()
    assert len(office.line.sent) == SEND_ATTEMPTS
    ((worker, error),) = office.lost
    assert (worker, str(error)) == (2, "no route")
    assert not office.post.empty()


@in_loop
async def test_what_is_no_matter_of_the_line_is_not_tried_again() -> None:
    office = Office()
    office.line.fails = [KeyError("defect")]
    office.post.put([(1, rim(1.0))])
    await office.settle()
    assert len(office.line.sent) == 1
    assert isinstance(office.lost[0][1], KeyError)


@in_loop
async def test_a_closed_post_leaves_no_sender() -> None:
    office = Office()
    office.line.open.clear()
    office.post.put([(1, rim(1.0)), (2, rim(2.0))])
    await asyncio.sleep(0)
    assert len(asyncio.all_tasks()) == 3  # two senders and this test
    office.post.close()
    office.post.put([(1, rim(3.0))])
    await asyncio.sleep(0.01)
    assert len(asyncio.all_tasks()) == 1
    assert office.line.sent == []
    assert office.lost == []
