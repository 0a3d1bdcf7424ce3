"""What the driver calls on a Dask worker: begin a run, prepare, work, look in, stop, hand over the record."""

from __future__ import annotations

from typing import Any

from distributed import Worker, get_worker

from breakstep.engine.native.payload import Payload
from breakstep.engine.resident import adapter
from breakstep.engine.resident.host import Assignment, Host
from breakstep.engine.resident.wire import Parcel
from breakstep.errors import ClusterError
from breakstep.steps.step import Array

_HOSTS: dict[str, Host] = {}


async def _receive(run: str, sender: int, number: int, parcel: Parcel) -> str:
    """A message for a run; one for a run that is over is dropped."""
    host = _HOSTS.get(run)
    return "gone" if host is None else await host.receive(sender, number, parcel)


def begin(assignment: Assignment, dask_worker: Worker) -> None:
    """Tell a worker of a run; from now on it takes messages for it."""
    adapter.listen(dask_worker, _receive)
    _HOSTS[assignment.run] = Host(assignment, dask_worker)


def prepare(run: str) -> None:
    """Make the worker's share of the initial state."""
    _host(run).prepare()


def work(run: str) -> Payload:
    """Run to the end; the final state of own tiles."""
    host = _host(run)
    final = host.work()
    arrays = {
        (name, tile, (0, 0, 0)): array for tile, fields in final.items() for name, array in fields.items()
    }
    return Payload(run, host.told.worker, host.told.worker, arrays)


def status(run: str) -> dict[str, Any]:
    """How far the worker is."""
    host = _HOSTS.get(run)
    return {"cycles": 0, "saved": [], "bytes": (0, 0), "stopped": True} if host is None else host.status()


def stop(run: str) -> None:
    """Call a run off."""
    host = _HOSTS.get(run)
    if host is not None:
        host.stop()


def collect(run: str) -> dict[str, Any]:
    """The worker's record; the run is forgotten."""
    host = _HOSTS.pop(run, None)
    if host is None:
        return {}
    host.stop()
    recorder = host.notes.recorder
    recorder.complete_threads(host.told.threads)
    return {
        "worker": recorder.worker,
        "zero": recorder.zero,
        "tables": recorder.record.tables(),
        "arrived": recorder.arrived,
        "peak": host.core.peak_bytes if host.core is not None else 0,
        "answers": host.core.answers if host.core is not None else [],
        "values": _last_values(host),
        "cycles": host.core.cycles_done if host.core is not None else 0,
    }


def _last_values(host: Host) -> dict[str, Array]:
    core = host.core
    newest = core.unroller.last_values() if core is not None else {}
    return {n: core.values[i] for n, i in newest.items() if core is not None and i in core.values}


def _host(run: str) -> Host:
    try:
        return _HOSTS[run]
    except KeyError:
        raise ClusterError(
            f"worker {get_worker().address} was asked to work on run {run}, of which it was never told; it"
            " restarted after the run began"
        ) from None
