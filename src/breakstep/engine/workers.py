"""The workers of a Dask cluster, asked of the scheduler itself.

``Client.scheduler_info`` will not do: a periodic refresh without workers can slip in between its own request
and its answer (seen on distributed 2026.8), and then all workers seem to be gone. Of the scheduler's state only
``Scheduler.workers`` and ``Scheduler.clients`` are used.
"""

from __future__ import annotations

import asyncio
from collections.abc import Awaitable, Callable, Sequence
from functools import partial
from typing import Any

from distributed import Client, Scheduler

from breakstep.errors import ClusterError

PATIENCE_SECONDS = 0.25  # an answer that takes longer makes us look whether the worker is still there


def _ask_workers(dask_scheduler: Scheduler) -> dict[str, tuple[str, int]]:
    return {address: (str(state.name), int(state.nthreads)) for address, state in dask_scheduler.workers.items()}


def _ask_clients(dask_scheduler: Scheduler) -> set[str]:
    return set(dask_scheduler.clients)


def present_workers(client: Client) -> dict[str, tuple[str, int]]:
    """Name and number of threads of every worker, by address."""
    found: dict[str, tuple[str, int]] = _ask_scheduler(client, _ask_workers)
    return found


def present_clients(client: Client) -> set[str]:
    """Names of the clients that are connected to the scheduler, this one among them."""
    found: set[str] = _ask_scheduler(client, _ask_clients)
    return found


def _ask_scheduler(client: Client, function: Callable[..., Any]) -> Any:
    try:
        if client.status == "running":
            return client.run_on_scheduler(function)
    except (OSError, AttributeError):  # Dask's client forgets its scheduler when the connection is lost
        if client.status == "running":
            raise
    raise ClusterError("the Dask scheduler has gone, and the run with it")


def require_present(client: Client, addresses: Sequence[str]) -> None:
    """Raise ClusterError, with ``details["lost"]``, when a worker has gone.

    Tasks tied to a worker that is gone wait for ever; nothing but the list of workers tells.
    """
    present = present_workers(client)
    gone = [address for address in addresses if address not in present]
    if gone:
        message = f"worker {', '.join(gone)} has gone and took its tiles with it; start the run again"
        raise ClusterError(message, lost=True)


def run_on(
    client: Client,
    addresses: Sequence[str],
    function: Callable[..., Any],
    *args: Any,
    meanwhile: Callable[[], None] | None = None,
) -> dict[str, Any]:
    """What a function returns on each of these workers, by address, as ``Client.run`` has it.

    Parameters
    ----------
    meanwhile : callable, optional
        Called again and again while answers are awaited; what it raises ends the waiting.

    Raises
    ------
    ClusterError
        A worker has gone meanwhile: Dask itself would try for half a minute to reach one that has just died.
    """
    call = partial(client.run, function, *args, workers=list(addresses))
    under_way, done = client.sync(_begin, call)
    try:
        while not done:
            require_present(client, addresses)
            if meanwhile is not None:
                meanwhile()
            done = client.sync(_is_done, under_way)
    finally:
        if not done:
            client.sync(_cancel, under_way)
    answers: dict[str, Any] = under_way.result()
    return answers


async def _begin(call: Callable[[], Awaitable[Any]]) -> tuple[asyncio.Future[Any], bool]:
    """On the client's loop, where its calls are coroutines."""
    under_way = asyncio.ensure_future(call())
    return under_way, await _is_done(under_way)


async def _is_done(under_way: asyncio.Future[Any]) -> bool:
    done, _ = await asyncio.wait([under_way], timeout=PATIENCE_SECONDS)
    return bool(done)


async def _cancel(under_way: asyncio.Future[Any]) -> None:
    under_way.cancel()


def known_workers(client: Client, wanted: int | None) -> tuple[list[str], int]:
    """Addresses of the workers to use, by name, and the threads of each.

    Raises
    ------
    ClusterError
        There are none, or fewer than wanted.
    """
    known = sorted(present_workers(client).items(), key=lambda item: item[1])[:wanted]
    if not known:
        raise ClusterError("the Dask cluster has no workers; start some and try again")
    if wanted is not None and len(known) < wanted:
        raise ClusterError(f"{wanted} workers were asked for, but the Dask cluster has {len(known)}")
    return [address for address, _ in known], min(threads for _, (_, threads) in known)
