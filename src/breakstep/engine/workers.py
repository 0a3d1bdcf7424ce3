"""The workers of a Dask cluster, in an order that does not change from call to call."""

from __future__ import annotations

from distributed import Client

from breakstep.errors import ClusterError


def known_workers(client: Client, wanted: int | None) -> tuple[list[str], int]:
    """Addresses of the workers to use, and the threads of each.

    Raises
    ------
    ClusterError
        There are none, or fewer than wanted.
    """
    found = client.scheduler_info(n_workers=-1)["workers"]
    known = sorted(found.items(), key=lambda item: str(item[1]["name"]))[:wanted]
    if not known:
        raise ClusterError("the Dask cluster has no workers; start some and try again")
    if wanted is not None and len(known) < wanted:
        raise ClusterError(f"{wanted} workers were asked for, but the Dask cluster has {len(known)}")
    return [address for address, _ in known], min(int(info["nthreads"]) for _, info in known)
