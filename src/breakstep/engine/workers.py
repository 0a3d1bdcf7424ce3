"""The workers of a Dask cluster, asked of the scheduler itself.

``Client.scheduler_info`` will not do: a periodic refresh without workers can slip in between its own request
and its answer (seen on distributed 2026.8), and then all workers seem to be gone. Of the scheduler's state only
``Scheduler.workers`` and ``Scheduler.clients`` are used.
"""

from __future__ import annotations

from collections.abc import Sequence

from distributed import Client, Scheduler

from breakstep.errors import ClusterError


def _ask_workers(dask_scheduler: Scheduler) -> dict[str, tuple[str, int]]:
    return {address: (str(state.name), int(state.nthreads)) for address, state in dask_scheduler.workers.items()}


def _ask_clients(dask_scheduler: Scheduler) -> set[str]:
    return set(dask_scheduler.clients)


def present_workers(client: Client) -> dict[str, tuple[str, int]]:
    """Name and number of threads of every worker, by address."""
    found: dict[str, tuple[str, int]] = client.run_on_scheduler(_ask_workers)
    return found


def present_clients(client: Client) -> set[str]:
    """Names of the clients that are connected to the scheduler, this one among them."""
    found: set[str] = client.run_on_scheduler(_ask_clients)
    return found


def require_present(client: Client, addresses: Sequence[str]) -> None:
    """Raise ClusterError when a worker has gone.

    Tasks tied to a worker that is gone wait for ever; nothing but the list of workers tells.
    """
    present = present_workers(client)
    gone = [address for address in addresses if address not in present]
    if gone:
        raise ClusterError(f"worker {', '.join(gone)} has gone and took its tiles with it; start the run again")


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
