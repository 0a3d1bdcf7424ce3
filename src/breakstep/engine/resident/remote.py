"""What the driver calls on a Dask worker: begin a run, prepare, work, look in, stop, hand over the record.

Also what a worker does about a driver that is gone: it gives a run up when nobody has asked for a whole lease, or
when another driver begins a run and finds that the cluster no longer knows the first.
"""

from __future__ import annotations

import asyncio
import time
from collections.abc import Collection
from dataclasses import replace
from functools import partial
from typing import Any

from distributed import Worker, get_worker, secede

from breakstep.engine.allocator import keep_memory, release_memory
from breakstep.engine.crowd import is_beside
from breakstep.engine.resident import adapter
from breakstep.engine.resident.host import Assignment, Host, Status
from breakstep.engine.resident.wire import Parcel
from breakstep.errors import ClusterError
from breakstep.steps.step import Array

LEASE_LOOKS = 8  # a lease ends after so many looks in a row without a word from the driver
END_SECONDS = 2.0  # most by which running kernels may hold up the hand-over of a record

_HOSTS: dict[tuple[str, str], Host] = {}  # (worker's address, run): several workers may share a process
_WATCHES: dict[tuple[str, str], asyncio.Task[None]] = {}


def _receiver(address: str) -> adapter.Handler:
    """What a worker does with a message; the sender is told when the run is over here."""

    async def receive(run: str, sender: int, number: int, parcel: Parcel) -> str:
        host = _HOSTS.get((address, run))
        return "gone" if host is None else await host.receive(sender, number, parcel)

    return receive


def _giver(address: str) -> adapter.Handler:
    """What a worker does when another asks for tiles that change owner."""

    async def give(run: str, tiles: list[int]) -> Any:
        host = _HOSTS.get((address, run))
        return None if host is None else adapter.parcelled(host.hand_over(tiles))

    return give


def begin(assignment: Assignment, clients: Collection[str], dask_worker: Worker) -> None:
    """Tell a worker of a run; from now on it takes messages for it.

    Parameters
    ----------
    clients : collection of str
        Drivers that the cluster knows; runs of others are dropped.
    """
    for (address, run), other in list(_HOSTS.items()):
        if address == dask_worker.address and other.told.client not in clients:
            _drop(address, run, "its driver is gone")
    if not adapter.is_listening(dask_worker):
        adapter.listen(dask_worker, _receiver(dask_worker.address))
        adapter.listen(dask_worker, _giver(dask_worker.address), adapter.TILES)
    key = (dask_worker.address, assignment.run)
    earlier = None if assignment.previous is None else _HOSTS.get((dask_worker.address, assignment.previous))
    keep_memory("/".join(key))
    host = _HOSTS[key] = Host(_sharing_program(assignment), dask_worker, earlier)
    host.beside = partial(_beside, *key)
    _WATCHES[key] = adapter.event_loop(dask_worker).create_task(_watch(*key))


def _sharing_program(assignment: Assignment) -> Assignment:
    """The same with the program of a worker beside this one, so that its plans are worked out once a process."""
    others = (host.told.program for (_, run), host in list(_HOSTS.items()) if run == assignment.run)
    return replace(assignment, program=next(others, assignment.program))


def _beside(address: str, run: str, other: str) -> Host | None:
    """The part of another worker in the same run, if it lives in this process's crowd."""
    return _HOSTS.get((other, run)) if is_beside(address, other) else None


async def _watch(address: str, run: str) -> None:
    """Give a run up when its driver is silent for a whole lease.

    Counts looks rather than seconds: a worker that was halted for a while has not waited in that time.
    """
    host = _HOSTS[address, run]
    silent, heard = 0, host.heard
    while silent < LEASE_LOOKS:
        await asyncio.sleep(host.told.lease / LEASE_LOOKS)
        silent = 0 if host.heard > heard else silent + 1
        heard = host.heard
    _drop(address, run, f"its driver has been silent for {host.told.lease:g} s")


def _drop(address: str, run: str, why: str) -> None:
    host, watch = _HOSTS.pop((address, run)), _WATCHES.pop((address, run))
    if watch is not asyncio.current_task():
        watch.cancel()
    host.stop(ClusterError(f"the run was given up: {why}", lost=True))
    host.close()
    release_memory(f"{address}/{run}")


def prepare(run: str) -> None:
    """Make the worker's share of the initial state."""
    host = _host(run)
    secede()
    host.prepare()


def work(run: str) -> None:
    """Run to the end.

    Like :func:`prepare` it leaves Dask's pool of threads: two runs at once could otherwise each hold the threads that
    the other's remaining workers wait for, and a run that hangs on a lost worker would hold up the next.
    """
    host = _host(run)
    secede()
    host.work()


def final(run: str, dask_worker: Worker) -> Parcel | None:
    """The final state of own tiles, as items ("final", tile); None when the run is not known here."""
    host = _HOSTS.get((dask_worker.address, run))
    if host is None:
        return None
    return Parcel([(("final", tile), _as_rims(tile, fields)) for tile, fields in host.final().items()])


def _as_rims(tile: int, fields: dict[str, Array]) -> dict[Any, Array]:
    """Whole arrays in the form in which rims travel: no offset stands for all of the tile."""
    return {(name, tile, (0, 0, 0)): array for name, array in fields.items()}


def status(run: str, dask_worker: Worker) -> Status | None:
    """How far the worker is; None when it has given the run up."""
    host = _HOSTS.get((dask_worker.address, run))
    return None if host is None else host.status()


def stop(run: str, dask_worker: Worker) -> None:
    """Call a run off."""
    host = _HOSTS.get((dask_worker.address, run))
    if host is not None:
        host.stop()


async def collect(run: str, dask_worker: Worker) -> dict[str, Any]:
    """The worker's record; the run is forgotten."""
    key = (dask_worker.address, run)
    host = _HOSTS.pop(key, None)
    if host is None:
        return {}
    _WATCHES.pop(key).cancel()
    host.stop()
    deadline = time.monotonic() + END_SECONDS
    while host.working and time.monotonic() < deadline:
        await asyncio.sleep(0.01)
    host.close()
    release_memory("/".join(key))
    return _record(host)


def _record(host: Host) -> dict[str, Any]:
    recorder, core = host.notes.recorder, host.core
    recorder.complete_threads(host.told.threads)
    return {
        "worker": recorder.worker,
        "zero": recorder.zero,
        "tables": recorder.record.tables(),
        "arrived": recorder.arrived,
        "peak": core.peak_bytes if core is not None else 0,
        "answers": core.answers if core is not None else [],
        "values": _last_values(host),
        "cycles": core.cycles_done if core is not None else 0,
    }


def _last_values(host: Host) -> dict[str, Array]:
    """The newest result of each, one row: what a checkpoint hands on has rows for the lag as well."""
    core = host.core
    newest = core.unroller.last_values() if core is not None else {}
    return {n: core.values[i][-1:] for n, i in newest.items() if core is not None and i in core.values}


def _host(run: str) -> Host:
    address = get_worker().address
    try:
        return _HOSTS[address, run]
    except KeyError:
        raise ClusterError(
            f"worker {address} was asked to work on run {run}, of which it was never told or which it has dropped",
            lost=True,
        ) from None
