"""Every call into parts of Dask that its manual does not promise, in one place.

What is used, on ``distributed`` from 2026.1: ``Worker.handlers`` (a dictionary of message handlers),
``Worker.rpc`` (a pool of connections to other workers, with the cluster's own encryption), and
``Worker.loop.asyncio_loop``. A test exercises each of them, so that a release that changes one is noticed.
"""

from __future__ import annotations

import asyncio
from collections.abc import Awaitable, Callable
from typing import Any

from distributed import Worker
from distributed.protocol import to_serialize

OPERATION = "breakstep_items"

Handler = Callable[..., Awaitable[Any]]


def listen(worker: Worker, handler: Handler) -> None:
    """Have a coroutine called for each of our messages: ``handler(run=, sender=, number=, parcel=)``."""
    worker.handlers[OPERATION] = handler


def is_listening(worker: Worker) -> bool:
    """Whether :func:`listen` has been called on this worker."""
    return OPERATION in worker.handlers


async def send(worker: Worker, address: str, run: str, sender: int, number: int, parcel: Any) -> Any:
    """Send a parcel and wait for the answer; raises OSError when the connection fails."""
    call = getattr(worker.rpc(address), OPERATION)
    return await call(run=run, sender=sender, number=number, parcel=to_serialize(parcel))


def event_loop(worker: Worker) -> asyncio.AbstractEventLoop:
    """The loop on which handlers and senders run."""
    loop: asyncio.AbstractEventLoop = worker.loop.asyncio_loop
    return loop
