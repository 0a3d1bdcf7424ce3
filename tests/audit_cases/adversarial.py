"""Falsehoods thought up after the audit was written, to see what it misses."""

from __future__ import annotations

import ctypes
import os
import threading

import numpy as np

from breakstep.steps.step import Array, Call, Read
from tests.audit_cases.common import XY, Arrays, Case, X

U, W = Read("u"), Read("w")
TENTH = [0]
NEIGHBOURS: dict[int, Array] = {}
LOG: list[Array] = []


def every_tenth_call(arrays: Arrays, call: Call) -> dict[str, Array]:
    TENTH[0] += 1
    return {"of_every_tenth_call": arrays["u"] + (TENTH[0] % 10 == 0)}


def asks_a_neighbour(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Keeps what other tiles gave it, and reads the one to the left."""
    NEIGHBOURS[call.tile] = arrays["u"] * 1.0
    left = NEIGHBOURS.get(call.tile - 1)
    return {"of_asks_a_neighbour": arrays["u"] + (0.0 if left is None else float(left[0, -1, 0, 0]))}


def changes_input_when_hot(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"]
    made = 2.0 * u
    if u.max() > 1e5:
        ctypes.memset(u.ctypes.data, 0, 8)
    return {"of_changes_input_when_hot": made}


def corners_at_jumps(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"]
    mean = 0.25 * (u[:, 2:, 1:-1] + u[:, :-2, 1:-1] + u[:, 1:-1, 2:] + u[:, 1:-1, :-2])
    jump = np.abs(u[:, 2:, 1:-1] - u[:, :-2, 1:-1]) > 1e4
    return {"of_corners_at_jumps": np.where(jump, 0.5 * (u[:, 2:, 2:] + u[:, :-2, :-2]), mean)}


def knows_its_thread(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_knows_its_thread": arrays["u"] + (threading.current_thread() is not threading.main_thread())}


def knows_its_process(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_knows_its_process": arrays["u"] + 1e-9 * os.getpid()}


def knows_its_address(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_knows_its_address": arrays["u"] + (arrays["u"].ctypes.data // 64 % 7)}


def beyond_by_strides(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"]
    flat = np.lib.stride_tricks.as_strided(u.reshape(-1), shape=(u.size + 8,), strides=(8,))
    return {"of_beyond_by_strides": u + 1e-3 * flat[8:].reshape(u.shape)}


def knows_tile_shape(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_knows_tile_shape": arrays["u"] / call.shape[0]}


def tile_number_late(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Depends on the tile's number after the fifth cycle only, which the samples do not reach."""
    return {"of_tile_number_late": arrays["u"] + (call.tile if call.cycle > 5 else 0)}


def unused_but_touched(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_unused_but_touched": arrays["u"] + 0.0 * arrays["w"][:1]}


def half_a_read(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Takes the far ghost zone along y although it declares x, by transposing a square piece."""
    u = arrays["u"][:, 1:-1]
    n = min(call.shape[:2])
    made = u.copy()
    made[:, :n, :n] = u[:, :n, :n].transpose(0, 2, 1, 3)
    return {"of_half_a_read": made}


def leaves_a_thread(arrays: Arrays, call: Call) -> dict[str, Array]:
    worker = threading.Thread(target=threading.Event().wait, args=(60.0,), daemon=True)
    worker.start()
    return {"of_leaves_a_thread": arrays["u"] * 2.0}


def sets_environment(arrays: Arrays, call: Call) -> dict[str, Array]:
    os.environ["AUDIT_CASE"] = str(int(os.environ.get("AUDIT_CASE", "0")) + 1)
    return {"of_sets_environment": arrays["u"] * 2.0}


def keeps_results(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Keeps a reference to what it returned, and changes it a call later."""
    made = arrays["u"] * 2.0
    LOG.append(made)
    if len(LOG) > 1:
        LOG[-2].flags.writeable = True
        LOG[-2][0, 0, 0, 0] = -7.0
    return {"of_keeps_results": made}


def sums_in_thread_order(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Adds what three threads made in the order in which they end."""
    parts: list[Array] = []
    rows = np.array_split(arrays["u"][0, :, 0, 0] / 3.0, 3)

    def work(index: int) -> None:
        total = 0.0
        for _ in range(int(np.random.default_rng().integers(1, 2000))):
            total += 0.0
        parts.append(rows[index] * (1.0 + index))

    threads = [threading.Thread(target=work, args=(index,)) for index in range(3)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    total = 0.0
    for part in parts:
        total = total * 1.1 + float(part.sum())
    return {"of_sums_in_thread_order": arrays["u"] + total}


def takes_with_wrap(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"]
    places = np.arange(1, u.shape[1] - 1)
    return {"of_takes_with_wrap": np.take(u, places + 2, axis=1, mode="wrap") - np.take(u, places, axis=1)}


def draws_by_tile(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_draws_by_tile": arrays["u"] + np.random.default_rng(call.tile).random()}


def default_argument(arrays: Arrays, call: Call, memo: dict[str, float] = {}) -> dict[str, Array]:  # noqa: B006
    scale = memo.setdefault("scale", float(arrays["u"].ravel()[0]))
    return {"of_default_argument": arrays["u"] * scale}


def sorts_the_tile(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_sorts_the_tile": np.sort(arrays["u"], axis=1)}


def last_row_unset(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Leaves a row unset in tiles at the far edge of the mesh."""
    made = np.empty_like(arrays["u"])
    rows = call.shape[0] - (call.origin[0] >= 12)
    made[:, :rows] = arrays["u"][:, :rows]
    return {"of_last_row_unset": made}


def seldom_reads(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Reads ``w`` in the eighth cycle, when it is hot: no call of the audit's meets both."""
    made = arrays["u"] * 2.0
    return {"of_seldom_reads": made + arrays["w"][:1] if call.cycle == 7 and made.max() > 1e6 else made}


CASES = [
    Case("every_tenth_call", every_tenth_call, (U,), ("hidden state", "call order")),
    Case("asks_a_neighbour", asks_a_neighbour, (U,), ("call order", "hidden state")),
    Case("changes_input_when_hot", changes_input_when_hot, (U,), ("changed input",)),
    Case("corners_at_jumps", corners_at_jumps, (Read("u", XY),), ("undeclared corners",)),
    Case("knows_its_thread", knows_its_thread, (U,), ("threads",)),
    Case("knows_its_process", knows_its_process, (U,), ("call order",)),
    Case(
        "knows_its_address",  # which of the signs shows depends on where the C library puts arrays
        knows_its_address,
        (U,),
        ("not repeatable", "call order", "outside memory", "hidden state"),
    ),
    Case("beyond_by_strides", beyond_by_strides, (U,), ("outside memory",)),
    Case("knows_tile_shape", knows_tile_shape, (U,), ("tiling",)),
    Case("tile_number_late", tile_number_late, (U,), ("tile number",)),
    Case("unused_but_touched", unused_but_touched, (U, W), ("unused read",)),
    Case("half_a_read", half_a_read, (Read("u", X),), ("undeclared halo", "tiling")),
    Case("leaves_a_thread", leaves_a_thread, (U,), ("side effect",)),
    Case("sets_environment", sets_environment, (U,), ("side effect",)),
    Case("keeps_results", keeps_results, (U,), ("shared result", "hidden state")),
    Case("sums_in_thread_order", sums_in_thread_order, (U,), ("not repeatable", "hidden state", "call order")),
    Case("takes_with_wrap", takes_with_wrap, (Read("u", X),), ("undeclared halo", "tiling")),
    Case("draws_by_tile", draws_by_tile, (U,), ("tile number",)),
    Case("default_argument", default_argument, (U,), ("call order", "hidden state")),
    Case("sorts_the_tile", sorts_the_tile, (U,), ("undeclared halo", "tiling")),
    Case("last_row_unset", last_row_unset, (U,), ("uninitialised",)),
]
MISSED = Case("seldom_reads", seldom_reads, (U,))
"""Not seen by calling it; its code gives it away, which makes a note."""
