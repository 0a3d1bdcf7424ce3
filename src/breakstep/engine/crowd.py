"""Several Dask workers in one process, for workers that wait more than they compute.

The first worker of each process is Dask's own; the others are started beside it, in its event loop. Messages between
workers of a crowd need no socket: they are copied, so that as many bytes move, and handed over.
"""

from __future__ import annotations

import asyncio
import contextlib
import sys
from collections.abc import Iterator, Sequence

from distributed import Client, Worker

from breakstep.engine.workers import present_workers, run_on
from breakstep.errors import BreakstepError, ClusterError

# Each worker would look at what its threads do every 10 ms, and at its memory every 100 ms.
CROWDED = {
    "distributed.worker.profile.enabled": False,
    "distributed.admin.system-monitor.interval": "10s",
    "distributed.worker.memory.target": False,
    "distributed.worker.memory.spill": False,
    "distributed.worker.memory.pause": False,
}
# For how long a thread may keep the interpreter's lock from one whose wait is over [s]. Python's 5 ms would lengthen
# waits by as much.
SWITCH_SECONDS = 0.0005

_COMPANY: list[Worker] = []
_MEMBERS: set[str] = set()


def is_beside(address: str, other: str) -> bool:
    """Whether two workers belong to the crowd of this process."""
    return address in _MEMBERS and other in _MEMBERS


@contextlib.contextmanager
def crowd_in(client: Client, workers: int, threads: int) -> Iterator[None]:
    """Have so many workers in all, spread evenly over the processes of those that there are.

    Raises
    ------
    ClusterError
        They do not start.
    """
    first = [address for address, _ in sorted(present_workers(client).items(), key=lambda item: item[1])]
    names = [
        f"{process}.{number:04}" for number in range(1, -(-workers // len(first))) for process in range(len(first))
    ]
    try:
        for process, address in enumerate(first):
            ours = [name for name in names[: workers - len(first)] if name.startswith(f"{process}.")]
            run_on(client, [address], _join, ours, threads)
    except OSError as error:
        raise ClusterError(f"this machine does not start {workers} workers ({error}); ask for fewer") from error
    try:
        yield
    finally:
        with contextlib.suppress(BreakstepError, OSError):  # a process that has gone took its workers with it
            run_on(client, first, _leave)


async def _join(names: Sequence[str], threads: int, dask_worker: Worker) -> None:
    """Start workers beside one; the scheduler cannot tell them from others."""
    sys.setswitchinterval(SWITCH_SECONDS)
    more = [
        Worker(
            dask_worker.scheduler.address,
            nthreads=threads,
            name=name,
            host="127.0.0.1",
            memory_limit=0,
            dashboard=False,
            local_directory=dask_worker.local_directory,
        )
        for name in names
    ]
    await asyncio.gather(*more)
    _COMPANY.extend(more)
    _MEMBERS.update(worker.address for worker in (dask_worker, *more))


async def _leave(dask_worker: Worker) -> None:
    await asyncio.gather(*(worker.close(nanny=False) for worker in _COMPANY), return_exceptions=True)
    _COMPANY.clear()
    _MEMBERS.clear()
