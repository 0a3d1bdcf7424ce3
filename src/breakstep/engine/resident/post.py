"""Messages from one worker to the others: a queue for each, and at most one sender at work on it.

Whatever has piled up while the last message was under way goes next, so that messages grow with the traffic and
no timer is needed. A message that fails is sent again under the same number; the receiver drops one that it has
already had. Knows nothing of what the items mean.
"""

from __future__ import annotations

import asyncio
import threading
import time
from collections import deque
from collections.abc import Awaitable, Callable, Sequence
from dataclasses import dataclass, field
from typing import TypeAlias

from breakstep.engine.resident.wire import Item, Parcel, size_of

SEND_ATTEMPTS = 4
RETRY_SECONDS = 0.05  # before the second attempt; doubled for each further one
PARCEL_BYTES = 16_000_000  # most bytes in one message; a larger item goes alone

Letter: TypeAlias = tuple[int, Item]  # the worker it is for, and what
Send: TypeAlias = Callable[[int, int, Parcel], Awaitable[None]]  # worker, number, parcel; OSError: try again


@dataclass
class _Outbox:
    """Items for one worker, whether a sender is at work on them, and the number of the last message."""

    items: deque[tuple[Item, int]] = field(default_factory=deque)
    active: bool = False
    number: int = 0


class Post:
    """A worker's outgoing messages.

    Parameters
    ----------
    loop : asyncio.AbstractEventLoop
        Where the senders run.
    workers : int
    send : callable
        Sends one message and returns when it has been received.
    moved : callable
        Told how many bytes have been queued, or (negative) received.
    failed : callable
        Told of a worker that cannot be reached, and why.
    """

    def __init__(
        self,
        loop: asyncio.AbstractEventLoop,
        workers: int,
        send: Send,
        moved: Callable[[int], None],
        failed: Callable[[int, Exception], None],
    ) -> None:
        self._loop, self._send, self._moved, self._failed = loop, send, moved, failed
        self._boxes = [_Outbox() for _ in range(workers)]
        self._lock = threading.Lock()
        self._senders: set[asyncio.Task[None]] = set()
        self._closed = False

    def put(self, letters: Sequence[Letter]) -> None:
        """Queue items; callable from any thread."""
        idle: list[int] = []
        total = 0
        with self._lock:
            for worker, item in letters:
                box, nbytes = self._boxes[worker], sum(size_of(item[1]).values())
                total += nbytes
                box.items.append((item, nbytes))
                if not box.active:
                    box.active = True
                    idle.append(worker)
        self._moved(total)
        if idle and not self._closed:
            self._loop.call_soon_threadsafe(self._start, idle)

    def empty(self) -> bool:
        """Whether everything has been received."""
        with self._lock:
            return not any(box.items or box.active for box in self._boxes)

    def close(self) -> None:
        """Give up what is under way; to be called in the event loop."""
        self._closed = True
        for task in list(self._senders):
            task.cancel()

    def _start(self, workers: Sequence[int]) -> None:
        for worker in workers:
            task = self._loop.create_task(self._empty_box(worker))
            self._senders.add(task)
            task.add_done_callback(self._senders.discard)

    async def _empty_box(self, worker: int) -> None:
        """Send what there is for a worker, one message at a time."""
        box = self._boxes[worker]
        while not self._closed:
            with self._lock:
                batch, nbytes = _batch(box.items)
                if not batch:
                    box.active = False
                    return
                box.number += 1
            try:
                await self._deliver(worker, box.number, Parcel(batch, time.perf_counter_ns()))
            except Exception as error:  # whatever it is, a worker that waits for this message would wait for ever
                self._failed(worker, error)
                return
            self._moved(-nbytes)

    async def _deliver(self, worker: int, number: int, parcel: Parcel) -> None:
        for attempt in range(1, SEND_ATTEMPTS + 1):
            try:
                await self._send(worker, number, parcel)
                return
            except OSError:
                if attempt == SEND_ATTEMPTS:
                    raise
                await asyncio.sleep(RETRY_SECONDS * 2 ** (attempt - 1))


def _batch(items: deque[tuple[Item, int]]) -> tuple[list[Item], int]:
    """As many items as one message may hold."""
    batch: list[Item] = []
    total = 0
    while items and (not batch or total + items[0][1] <= PARCEL_BYTES):
        item, nbytes = items.popleft()
        batch.append(item)
        total += nbytes
    return batch, total
