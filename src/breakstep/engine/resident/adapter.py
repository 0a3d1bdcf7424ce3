"""Every call into parts of Dask that its manual does not promise, in one place.

What is used, on ``distributed`` from 2026.1: ``Worker.handlers`` (a dictionary of message handlers), ``Worker.rpc``
(a pool of connections to other workers, with the cluster's own encryption), ``Worker.loop.asyncio_loop``,
``Client.security.get_connection_args`` and the form of a message to a handler. What is asked of the scheduler is in
``breakstep.engine.workers``. A test exercises each of them, so that a release that changes one is noticed.
"""

from __future__ import annotations

import asyncio
from collections.abc import Awaitable, Callable
from typing import Any

from distributed import Client, Worker, connect
from distributed.protocol import to_serialize

ITEMS = "breakstep_items"
TILES = "breakstep_tiles"
CONNECT_SECONDS = 5  # to a worker from the client: a wall between them may swallow every attempt

Handler = Callable[..., Awaitable[Any]]


def listen(worker: Worker, handler: Handler, operation: str = ITEMS) -> None:
    """Have a coroutine function called for each message of an operation, by default the one that :func:`send` sends."""
    worker.handlers[operation] = handler


def is_listening(worker: Worker, operation: str = ITEMS) -> bool:
    """Whether :func:`listen` has been called on this worker."""
    return operation in worker.handlers


async def send(worker: Worker, address: str, run: str, sender: int, number: int, parcel: Any) -> Any:
    """Send a parcel and wait for the answer; raises OSError when the connection fails."""
    call = getattr(worker.rpc(address), ITEMS)
    return await call(run=run, sender=sender, number=number, parcel=to_serialize(parcel))


async def fetch(worker: Worker, address: str, run: str, tiles: list[int]) -> Any:
    """Ask a worker for the state of tiles that it owned in a run; answered by what :func:`parcelled` made."""
    return await getattr(worker.rpc(address), TILES)(run=run, tiles=tiles)


def parcelled(parcel: Any) -> Any:
    """A handler's answer that travels with its arrays out of band."""
    return to_serialize(parcel)


def event_loop(worker: Worker) -> asyncio.AbstractEventLoop:
    """The loop on which handlers and senders run."""
    loop: asyncio.AbstractEventLoop = worker.loop.asyncio_loop
    return loop


async def exchange(
    client: Client, address: str, operation: str, times: int, now: Callable[[], int]
) -> list[tuple[int, Any, int]]:
    """Call an operation again and again over one connection from here to a worker; to be run on the client's loop.

    Returns
    -------
    list of (int, answer, int)
        Each answer between the moments of asking and of having it.

    Raises
    ------
    OSError
        The worker cannot be reached from here.
    """
    comm = await connect(address, timeout=CONNECT_SECONDS, **client.security.get_connection_args("client"))
    try:
        found = []
        for _ in range(times):
            before = now()
            await comm.write({"op": operation, "reply": True})
            answer = await comm.read()
            found.append((before, answer, now()))
        return found
    finally:
        await comm.close()
