"""One cluster of four worker processes for all tests that leave it as they found it."""

from __future__ import annotations

import time
from collections.abc import Iterator

import pytest
from distributed import Client

from breakstep.engine.cluster import local_cluster


@pytest.fixture(scope="session")
def client() -> Iterator[Client]:
    """Four workers of one thread: the whole start costs about as much as a dozen small runs."""
    with local_cluster(4) as found:
        yield found


def runs_known() -> int:
    """How many runs this worker process holds."""
    from breakstep.engine.native import worker

    return len(worker._RUNS)


def leftovers(client: Client) -> dict[str, int]:
    """What a run has left: futures on the client (let go of within moments), tasks, and runs on workers."""
    deadline = time.monotonic() + 5.0
    while (client.futures or _tasks(client)) and time.monotonic() < deadline:
        time.sleep(0.02)
    return {
        "futures": len(client.futures),
        "tasks": _tasks(client),
        "runs": sum(client.run(runs_known).values()),
    }


def _tasks(client: Client) -> int:
    return int(client.run_on_scheduler(lambda dask_scheduler: len(dask_scheduler.tasks)))


NOTHING = {"futures": 0, "tasks": 0, "runs": 0}
