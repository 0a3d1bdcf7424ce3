"""The parts of Dask that its manual does not promise, one by one: a release that changes any is named here.

And what travels through them: parcels arrive as they left.
"""

from __future__ import annotations

import asyncio
from typing import Any

import distributed
import numpy as np
import pytest
from distributed import Client, Worker

from breakstep.engine import workers
from breakstep.engine.resident import adapter
from breakstep.engine.resident.host import ANSWERS
from breakstep.engine.resident.wire import Parcel

pytestmark = pytest.mark.cluster

VERSION = distributed.__version__
OPERATION = "breakstep_contract"


def addresses_of(client: Client) -> list[str]:
    """Two workers."""
    return sorted(workers.present_workers(client))[:2]


def _handlers(dask_worker: Worker) -> str:
    return type(dask_worker.handlers).__name__ if "gather" in dask_worker.handlers else "no table of handlers"


def _loop(dask_worker: Worker) -> bool:
    return adapter.event_loop(dask_worker) is asyncio.get_running_loop()


async def _echo(run: str, sender: int, number: int, parcel: Parcel) -> Any:
    """Answers with all it was given, and how the arrays are."""
    facts = [
        (
            name,
            a.dtype.str,
            a.shape,
            a.flags.aligned,
            a.flags.c_contiguous,
            a.flags.writeable,
            a.base is None or a.base.nbytes == a.nbytes,
        )
        for _, arrays in parcel.items
        if isinstance(arrays, dict)
        for (name, _, _), a in arrays.items()
    ]
    return run, sender, number, [key for key, _ in parcel.items], facts, parcel.packed, parcel.unpacked


def _listen(dask_worker: Worker) -> bool:
    before = dask_worker.handlers.get(adapter.ITEMS)
    adapter.listen(dask_worker, _echo)
    dask_worker.handlers["breakstep_before"] = before
    return adapter.is_listening(dask_worker)


def _restore(dask_worker: Worker) -> None:
    before = dask_worker.handlers.pop("breakstep_before")
    if before is None:
        del dask_worker.handlers[adapter.ITEMS]
    else:
        dask_worker.handlers[adapter.ITEMS] = before


async def _send(address: str, zones: int, dask_worker: Worker) -> Any:
    items = [(("rims", 1, 2, 3), rims(zones)), (("value", 4), np.array([[1.0 / 3.0, np.inf]])), (("count", 5), None)]
    return await adapter.send(dask_worker, address, "run", 7, 11, Parcel(items))


def rims(zones: int) -> dict[Any, Any]:
    """Two arrays of odd sizes, so that the second would not lie at a multiple of 8 bytes behind the header."""
    return {("u", 2, (1, 0, 0)): np.ones((1, zones, 1, 1)), ("w", 2, (0, -1, 0)): np.full((2, zones, 3, 1), 0.5)}


def test_worker_handlers_is_a_dictionary(client: Client) -> None:
    found = set(client.run(_handlers).values())
    assert found == {"dict"}, f"distributed {VERSION}: Worker.handlers is {found}, was a dictionary of handlers by name"


def test_worker_loop_asyncio_loop_is_the_loop_of_handlers(client: Client) -> None:
    where = f"distributed {VERSION}: Worker.loop.asyncio_loop is no longer the event loop on which handlers run"
    assert all(client.run(_loop).values()), where


@pytest.mark.parametrize("zones", [1, 3, 1000])
def test_worker_rpc_reaches_a_handler_and_brings_its_answer(client: Client, zones: int) -> None:
    here, there = addresses_of(client)
    try:
        assert client.run(_listen, workers=[there])[there]
        run, sender, number, keys, facts, packed, unpacked = client.run(_send, there, zones, workers=[here])[here]
    finally:
        client.run(_restore, workers=[there])
    where = f"distributed {VERSION}: Worker.rpc(address).operation(...) no longer hands its arguments to a handler"
    assert (run, sender, number) == ("run", 7, 11), where
    assert [tuple(key) for key in keys] == [("rims", 1, 2, 3), ("value", 4), ("count", 5)], where
    whole = f"distributed {VERSION}: arrays do not arrive aligned, contiguous, protected and on their own"
    assert [tuple(fact) for fact in facts] == [
        ("u", "<f8", (1, zones, 1, 1), True, True, False, True),
        ("w", "<f8", (2, zones, 3, 1), True, True, False, True),
    ], whole
    assert packed > 0, f"distributed {VERSION}: a parcel is no longer packed by the function registered for it"
    assert unpacked > 0


def test_a_worker_that_is_not_there_is_an_oserror(client: Client) -> None:
    here, _ = addresses_of(client)
    with pytest.raises(OSError, match=r"127\.0\.0\.1:9"):
        client.run(_send_soon, "tcp://127.0.0.1:9", workers=[here])


async def _send_soon(address: str, dask_worker: Worker) -> Any:
    """The connection pool would try for half a minute; the kind of error is what matters."""
    import dask

    with dask.config.set({"distributed.comm.timeouts.connect": "200ms"}):
        return await _send(address, 1, dask_worker)


def test_an_unknown_operation_is_an_error_and_no_answer(client: Client) -> None:
    """A message for a worker that was never told of any run must not look delivered."""
    here, there = addresses_of(client)
    client.run(_forget, workers=[there])
    answer = client.run(_send, there, 1, workers=[here])[here]
    where = f"distributed {VERSION}: a message without a handler was answered by {answer!r}, was by nothing"
    assert answer is None, where
    assert answer not in ANSWERS


def _forget(dask_worker: Worker) -> None:
    dask_worker.handlers.pop(adapter.ITEMS, None)


async def _count() -> int:
    return 42


def _listen_to_count(dask_worker: Worker) -> None:
    adapter.listen(dask_worker, _count, OPERATION)


def test_a_client_can_talk_to_a_worker_over_one_connection(client: Client) -> None:
    _, there = addresses_of(client)
    client.run(_listen_to_count, workers=[there])
    ticks = iter(range(100))
    found = client.sync(adapter.exchange, client, there, OPERATION, 3, lambda: next(ticks))
    where = f"distributed {VERSION}: connect(), Client.security.get_connection_args or the form of a message changed"
    assert found == [(0, 42, 1), (2, 42, 3), (4, 42, 5)], where
    client.run(_deafen, workers=[there])


def _deafen(dask_worker: Worker) -> None:
    del dask_worker.handlers[OPERATION]


def test_the_scheduler_knows_workers_and_clients(client: Client) -> None:
    found = workers.present_workers(client)
    assert len(found) == 4, f"distributed {VERSION}: Scheduler.workers no longer lists workers by address"
    assert {threads for _, threads in found.values()} == {1}, f"distributed {VERSION}: WorkerState.nthreads changed"
    known = f"distributed {VERSION}: Scheduler.clients no longer lists clients by Client.id"
    assert client.id in workers.present_clients(client), known
    with Client(client.scheduler.address, set_as_default=False) as other:
        assert {client.id, other.id} <= workers.present_clients(client)
    assert other.id not in workers.present_clients(client), known
