"""What tasks hand to each other on Dask, and the note each makes of its journey between workers.

Dask calls the two functions registered here when a payload leaves a worker and when it arrives at
another. That is public interface, and the only place where bytes in motion can be timed from outside.
"""

from __future__ import annotations

import time
from collections.abc import Hashable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from dask.sizeof import sizeof
from distributed.protocol import dask_deserialize, dask_serialize

from breakstep.steps.step import Array

ARRIVALS: list[Arrival] = []  # of this process, until a run collects them


@dataclass(frozen=True)
class Arrival:
    """One payload that came from another worker; times in the clocks of sender and receiver [ns]."""

    run: str
    producer: int
    sender: int
    sizes: dict[str, int]
    sent: int
    packed: int
    unpacked: int
    arrived: int


@dataclass
class Payload:
    """Arrays made by one task.

    Attributes
    ----------
    run, producer, worker : str, int, int
        Which run, task and worker made it.
    arrays : dict
        For a step task field -> array; for a pack task (field, consumer tile, offset) -> rim;
        for a node of a reduction "value" -> array.
    partials : dict
        For a step task, reduction -> contribution or None (passed through).
    """

    run: str
    producer: int
    worker: int
    arrays: dict[Any, Array] = field(default_factory=dict)
    partials: dict[str, Array | None] = field(default_factory=dict)

    @property
    def nbytes(self) -> int:
        """Bytes of all arrays."""
        return sum(array.nbytes for array in self.arrays.values())


@sizeof.register(Payload)
def _sizeof(payload: Payload) -> int:
    return payload.nbytes + 200


@dask_serialize.register(Payload)
def _pack(payload: Payload) -> tuple[dict[str, Any], list[Any]]:
    began = time.perf_counter_ns()
    arrays = {key: np.ascontiguousarray(array) for key, array in payload.arrays.items()}
    header = {
        "run": payload.run,
        "producer": payload.producer,
        "worker": payload.worker,
        "keys": [_flatten(key) for key in arrays],
        "shapes": [array.shape for array in arrays.values()],
        "partials": [(n, None if v is None else v.tolist()) for n, v in payload.partials.items()],
        "sent": began,
        "packed": time.perf_counter_ns() - began,
    }
    return header, [array.reshape(-1).view(np.uint8).data for array in arrays.values()]


@dask_deserialize.register(Payload)
def _unpack(header: dict[str, Any], frames: list[Any]) -> Payload:
    began = time.perf_counter_ns()
    arrays: dict[Any, Array] = {}
    sizes: dict[str, int] = {}
    for flat, shape, frame in zip(header["keys"], header["shapes"], frames, strict=True):
        array = np.frombuffer(frame, dtype=np.float64).reshape(shape)
        if not array.flags.aligned:  # frames share a buffer, at any offset (seen on distributed 2026.8)
            array = array.copy()
        array.flags.writeable = False
        arrays[_unflatten(flat)] = array
        name = str(flat[0])
        sizes[name] = sizes.get(name, 0) + array.nbytes
    partials = {n: None if v is None else np.asarray(v) for n, v in header["partials"]}
    payload = Payload(header["run"], header["producer"], header["worker"], arrays, partials)
    arrived = time.perf_counter_ns()
    ARRIVALS.append(
        Arrival(
            payload.run, payload.producer, payload.worker, sizes or {"control": 0},
            header["sent"], header["packed"], arrived - began, arrived,
        )
    )  # fmt: skip
    return payload


def _flatten(key: Hashable) -> list[Any]:
    if isinstance(key, tuple):
        name, tile, offset = key
        return [name, tile, *offset]
    return [key]


def _unflatten(flat: list[Any]) -> Any:
    return flat[0] if len(flat) == 1 else (flat[0], flat[1], tuple(flat[2:]))
