"""What workers send each other: a parcel of items, serialised by Dask with its arrays out of band.

The arrays of a parcel travel as frames of their own, without a copy into a message; the receiver copies them out of
what it has read. Packing and unpacking are timed where they happen.
"""

from __future__ import annotations

import time
from dataclasses import dataclass, field
from typing import Any, TypeAlias

import numpy as np
from distributed.protocol import dask_deserialize, dask_serialize

from breakstep.steps.step import Array

Key: TypeAlias = tuple[Any, ...]
Item: TypeAlias = tuple[Key, Any]  # key; rims as a dictionary, a vector, or None

FRAME = "frame"  # marks an array's place in what travels in the header


@dataclass
class Parcel:
    """Items on their way from one worker to another, with what their journey took.

    Attributes
    ----------
    items : list of (key, payload)
        ``payload`` is None, a vector, or a dictionary of rims by (field, tile, offset).
    sent, packed : int
        Moment packing (or, in one process, sending) began, in the sender's clock, and how long it took [ns].
    unpacked : int
        How long the reverse took at the receiver [ns].
    """

    items: list[Item]
    sent: int = 0
    packed: int = 0
    unpacked: int = field(default=0, compare=False)


@dask_serialize.register(Parcel)
def _pack(parcel: Parcel) -> tuple[dict[str, Any], list[Any]]:
    began = time.perf_counter_ns()
    frames: list[Any] = []
    places = [_place(key, payload, frames) for key, payload in parcel.items]
    return {"items": places, "sent": began, "packed": time.perf_counter_ns() - began}, frames


def _place(key: Key, payload: Any, frames: list[Any]) -> list[Any]:
    """An item as plain lists: rims by place and shape, small vectors as they are."""
    if payload is None:
        return [list(key), None]
    if isinstance(payload, dict):
        shapes = []
        for (name, tile, offset), array in payload.items():
            frames.append(np.ascontiguousarray(array).reshape(-1).view(np.uint8).data)
            shapes.append([name, tile, list(offset), list(array.shape)])
        return [list(key), FRAME, shapes]
    return [list(key), payload.tolist()]


@dask_deserialize.register(Parcel)
def _unpack(header: dict[str, Any], frames: list[Any]) -> Parcel:
    began = time.perf_counter_ns()
    remaining = iter(frames)
    items: list[Item] = []
    for place in header["items"]:
        key = tuple(place[0])
        if len(place) == 3:
            items.append((key, {_rim_key(shape): _array(next(remaining), shape[3]) for shape in place[2]}))
        else:
            items.append((key, None if place[1] is None else np.array(place[1], dtype=np.float64)))
    return Parcel(items, header["sent"], header["packed"], time.perf_counter_ns() - began)


def _rim_key(shape: list[Any]) -> Key:
    return shape[0], shape[1], tuple(shape[2])


def _array(frame: Any, shape: list[int]) -> Array:
    """An array of its own: a view would keep the whole message, and may not be aligned."""
    array = np.empty(shape)
    array.reshape(-1).view(np.uint8)[:] = np.frombuffer(frame, dtype=np.uint8)
    array.flags.writeable = False
    return array


def copied(parcel: Parcel) -> Parcel:
    """A parcel for a worker of the same process, which shares no array with this one; timed as packing."""
    began = time.perf_counter_ns()
    items = [(key, _copy(payload)) for key, payload in parcel.items]
    return Parcel(items, parcel.sent, time.perf_counter_ns() - began)


def _copy(payload: Any) -> Any:
    if isinstance(payload, dict):
        return {key: _copy(array) for key, array in payload.items()}
    if payload is None:
        return None
    array = payload.copy()
    array.flags.writeable = False
    return array


def size_of(payload: Any) -> dict[str, int]:
    """Bytes of an item's payload by field; a vector counts as ``value``, an empty one as ``control``."""
    if payload is None:
        return {"control": 0}
    if not isinstance(payload, dict):
        return {"value": int(payload.nbytes)}
    sizes: dict[str, int] = {}
    for (name, _, _), array in payload.items():
        sizes[name] = sizes.get(name, 0) + array.nbytes
    return sizes
