"""False declarations in Python and NumPy."""

from __future__ import annotations

import ctypes
import random
import tempfile
import time
from dataclasses import dataclass, field
from functools import cache
from pathlib import Path

import numpy as np

from breakstep.steps.reduction import Combine, Reduction
from breakstep.steps.step import Array, Call, Read
from tests.audit_cases.common import X2, XY, Arrays, Case, X, Y, as_it_is

COUNTER = [0]
LAST: dict[str, float] = {}
FIRST: dict[str, float] = {}
BY_TILE: dict[int, float] = {}
BUFFER = np.zeros((1, 6, 8, 1))
SCRATCH = np.zeros(4096)
SHARED = {"u": np.zeros((1, 1, 1, 1))}
STATE: dict[str, Array] = {}


def reads_other_field(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_reads_other_field": arrays["u"] + arrays["w"][:1]}


def reads_other_field_sometimes(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"]
    made = u * 2.0
    if u.max() > 1e6:
        made = made + arrays["w"][1:]
    return {"of_reads_other_field_sometimes": made}


def looks_at_other_field(arrays: Arrays, call: Call) -> dict[str, Array]:
    level = float(arrays["w"].mean())
    return {"of_looks_at_other_field": arrays["u"] + 0.0 * (level > 1e300)}


def wider_halo(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"]
    return {"of_wider_halo": u[:, 4:] + u[:, 2:-2] + u[:, :-4]}


def wider_halo_clamped(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = np.pad(arrays["u"], ((0, 0), (1, 1), (0, 0), (0, 0)), mode="edge")
    return {"of_wider_halo_clamped": u[:, 4:] - u[:, 2:-2]}


def rolls_without_halo(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_rolls_without_halo": arrays["u"] - np.roll(arrays["u"], 1, axis=1)}


def wrong_axis(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"][:, 1:-1]
    return {"of_wrong_axis": np.gradient(u, axis=2)}


def wrong_axis_fails(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"]
    return {"of_wrong_axis_fails": u[:, :, 2:] - u[:, :, :-2]}


def corners(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"]
    return {"of_corners": u[:, 2:, 2:] + u[:, :-2, :-2] + u[:, 1:-1, 1:-1]}


def corners_hidden(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = np.nan_to_num(arrays["u"])
    along = u[:, 2:] + u[:, :-2]
    return {"of_corners_hidden": along[:, :, 2:] + along[:, :, :-2]}


def unused_field(arrays: Arrays, call: Call) -> dict[str, Array]:
    assert arrays["w"].shape[0] == 2
    return {"of_unused_field": 2.0 * arrays["u"]}


def unused_halo(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"]
    return {"of_unused_halo": u[:, 3:-1] - u[:, 1:-3]}


def unused_halo_all(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_unused_halo_all": arrays["u"][:, 1:-1, 1:-1] * 3.0}


def unused_axis(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"][:, :, 1:-1]
    return {"of_unused_axis": u[:, 2:] - u[:, :-2]}


def unused_corners(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"]
    return {"of_unused_corners": u[:, 2:, 1:-1] + u[:, :-2, 1:-1] + u[:, 1:-1, 2:] + u[:, 1:-1, :-2]}


def unused_reduction(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_unused_reduction": 2.0 * arrays["u"]}


def undeclared_reduction(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_undeclared_reduction": arrays["u"] * call.dt}


def undeclared_second_reduction(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_undeclared_second_reduction": arrays["u"] * call.dt + call.values["other"][0]}


def changes_input(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"]
    u += 1.0
    return {"of_changes_input": u.copy()}


def changes_input_by_pointer(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"]
    made = u * 2.0
    ctypes.memset(u.ctypes.data, 0, 8)
    return {"of_changes_input_by_pointer": made}


def counts(arrays: Arrays, call: Call) -> dict[str, Array]:
    COUNTER[0] += 1
    return {"of_counts": arrays["u"] + 1e-6 * COUNTER[0]}


def remembers_last(arrays: Arrays, call: Call) -> dict[str, Array]:
    before = LAST.get("mean", 0.0)
    LAST["mean"] = float(arrays["u"][0, 0, 0, 0])
    return {"of_remembers_last": arrays["u"] + before}


def remembers_first(arrays: Arrays, call: Call) -> dict[str, Array]:
    first = FIRST.setdefault("scale", float(arrays["u"][0, 0, 0, 0]))
    return {"of_remembers_first": arrays["u"] * first}


def remembers_by_tile(arrays: Arrays, call: Call) -> dict[str, Array]:
    scale = BY_TILE.setdefault(call.tile, float(arrays["u"][0, 0, 0, 0]))
    return {"of_remembers_by_tile": arrays["u"] * scale}


@cache
def _drawn(cycle: int) -> float:
    return random.random()


def draws_once_a_cycle(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_draws_once_a_cycle": arrays["u"] + _drawn(call.cycle)}


def returns_input(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_returns_input": arrays["u"]}


def returns_view(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_returns_view": arrays["u"][:, 1:-1] if call.cycle % 2 else arrays["u"][:, 2:]}


def returns_buffer(arrays: Arrays, call: Call) -> dict[str, Array]:
    view = BUFFER.reshape(-1)[: arrays["u"].size].reshape(arrays["u"].shape)
    view.flags.writeable = True
    view[...] = 2.0 * arrays["u"]
    return {"of_returns_buffer": view}


def shares_scratch(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"]
    scratch = SCRATCH[: u.size].reshape(u.shape)
    scratch[...] = np.sqrt(np.abs(u))
    return {"of_shares_scratch": scratch * 2.0}


@dataclass
class KeepsScratch:
    """Work space in the kernel object, which all threads of a worker share."""

    space: dict[str, Array] = field(default_factory=dict)

    def __call__(self, arrays: Arrays, call: Call) -> dict[str, Array]:
        self.space["work"] = np.exp(-np.abs(arrays["u"]))
        return {"of_keeps_scratch": self.space["work"] + 1.0}


def draws(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_draws": arrays["u"] + 1e-9 * np.random.default_rng().random(arrays["u"].shape)}


def seeds(arrays: Arrays, call: Call) -> dict[str, Array]:
    np.random.seed(call.cycle)
    return {"of_seeds": arrays["u"] + np.random.random()}


def reads_clock(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_reads_clock": arrays["u"] + time.time() // 86400.0}


def adds_in_set_order(arrays: Arrays, call: Call) -> dict[str, Array]:
    total = np.zeros_like(arrays["u"])
    for weight, name in enumerate({"first", "second", "third", "fourth", "fifth", "sixth"}):
        total = total + (1.0 + 0.1 * weight) * len(name) * arrays["u"] / 3.0
    return {"of_adds_in_set_order": total}


def knows_tile(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_knows_tile": arrays["u"] * (1.0 + 0.01 * (call.tile == 3))}


def knows_tile_parity(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_knows_tile_parity": arrays["u"] + 0.5 * (call.tile % 2)}


def subtracts_mean(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_subtracts_mean": arrays["u"] - arrays["u"].mean()}


def local_place(arrays: Arrays, call: Call) -> dict[str, Array]:
    x = np.arange(call.shape[0], dtype=np.float64)[None, :, None, None]
    return {"of_local_place": arrays["u"] * np.sin(x)}


def edge_of_tile(arrays: Arrays, call: Call) -> dict[str, Array]:
    made = arrays["u"] * 1.0
    made[:, 0] = 0.0
    return {"of_edge_of_tile": made}


def extra_write(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_extra_write": arrays["u"] * 2.0, "w": np.zeros((2, *call.shape))}


def extra_write_sometimes(arrays: Arrays, call: Call) -> dict[str, Array]:
    made = {"of_extra_write_sometimes": arrays["u"] * 2.0}
    return {**made, "w": np.zeros((2, *call.shape))} if call.cycle > 1 else made


def missing_write(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_missing_write": arrays["u"] * 2.0}


def padded_write(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_padded_write": arrays["u"] * 2.0}


def single_precision(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_single_precision": arrays["u"].astype(np.float32)}


def half_set(arrays: Arrays, call: Call) -> dict[str, Array]:
    made = np.empty_like(arrays["u"])
    made[:, :-1] = arrays["u"][:, :-1]
    return {"of_half_set": made}


def adds_to_empty(arrays: Arrays, call: Call) -> dict[str, Array]:
    work = np.empty(call.shape)
    work[1:] = arrays["u"][0, 1:]
    return {"of_adds_to_empty": (arrays["u"] + 0.0 * np.nan_to_num(work[:1]).sum() + (work[0, 0, 0] > 1.0))}


def writes_shared(arrays: Arrays, call: Call) -> dict[str, Array]:
    SHARED["u"] = arrays["u"] * 1.0
    STATE["u"] = SHARED["u"]
    return {"of_writes_shared": arrays["u"] * 2.0}


def reads_shared(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_reads_shared": arrays["u"] + float(SHARED["u"].max())}


def writes_file(arrays: Arrays, call: Call) -> dict[str, Array]:
    with (Path(tempfile.gettempdir()) / "audit-case.txt").open("a") as file:
        file.write("")
    return {"of_writes_file": arrays["u"] * 2.0}


def divides(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_divides": arrays["u"] * (1 // (call.cycle - 3))}


def rate_of_other(arrays: Arrays, call: Call) -> Array:
    return np.array([np.abs(arrays["w"]).max()])


def rate_of_tile_mean(arrays: Arrays, call: Call) -> Array:
    return np.array([arrays["u"].mean()])


def rate_of_nothing(arrays: Arrays, call: Call) -> Array:
    return np.array([1.0])


def rate_counting(arrays: Arrays, call: Call) -> Array:
    COUNTER[0] += 1
    return np.array([np.abs(arrays["u"]).max() + COUNTER[0]])


U, W = Read("u"), Read("w")
NINE = Read("u", XY, corners=True)

CASES = [
    Case("reads_other_field", reads_other_field, (U,), ("undeclared field",)),
    Case("reads_other_field_sometimes", reads_other_field_sometimes, (U,), ("undeclared field",)),
    Case("looks_at_other_field", looks_at_other_field, (U,), ("undeclared field",)),
    Case("wider_halo", wider_halo, (Read("u", X),), ("undeclared halo",)),
    Case("wider_halo_clamped", wider_halo_clamped, (Read("u", X),), ("undeclared halo",)),
    Case("rolls_without_halo", rolls_without_halo, (U,), ("undeclared halo",)),
    Case("wrong_axis", wrong_axis, (Read("u", X),), ("undeclared halo",)),
    Case("wrong_axis_fails", wrong_axis_fails, (Read("u", X),), ("undeclared halo",)),
    Case("corners", corners, (Read("u", XY),), ("undeclared corners",)),
    Case("corners_hidden", corners_hidden, (Read("u", XY),), ("undeclared corners",)),
    Case("unused_field", unused_field, (U, W), ("unused read",)),
    Case("unused_halo", unused_halo, (Read("u", X2),), ("unused halo",)),
    Case("unused_halo_all", unused_halo_all, (Read("u", XY),), ("unused halo",)),
    Case("unused_axis", unused_axis, (Read("u", XY),), ("unused halo",)),
    Case("unused_corners", unused_corners, (NINE,), ("unused corners",)),
    Case("unused_reduction", unused_reduction, (U,), ("unused reduction",), uses=("dt",)),
    Case("undeclared_reduction", undeclared_reduction, (U,), ("undeclared reduction",)),
    Case("undeclared_second_reduction", undeclared_second_reduction, (U,), ("undeclared reduction",), uses=("dt",)),
    Case("changes_input", changes_input, (U,), ("changed input",)),
    Case("changes_input_by_pointer", changes_input_by_pointer, (U,), ("changed input",)),
    Case("counts", counts, (U,), ("hidden state",)),
    Case("remembers_last", remembers_last, (U,), ("hidden state",)),
    Case("remembers_first", remembers_first, (U,), ("call order",)),
    Case("remembers_by_tile", remembers_by_tile, (U,), ("call order", "hidden state")),
    Case("draws_once_a_cycle", draws_once_a_cycle, (U,), ("call order",)),
    Case("returns_input", returns_input, (U,), ("shared result",)),
    Case("returns_buffer", returns_buffer, (U,), ("shared result",)),
    Case("shares_scratch", shares_scratch, (U,), ("hidden state", "threads")),
    Case("keeps_scratch", KeepsScratch(), (U,), ("hidden state", "threads")),
    Case("draws", draws, (U,), ("not repeatable",)),
    Case("seeds", seeds, (U,), ("side effect",)),
    Case("reads_clock", reads_clock, (U,), ("not repeatable",)),
    Case("adds_in_set_order", adds_in_set_order, (U,), ("call order",)),
    Case("knows_tile", knows_tile, (U,), ("tile number",)),
    Case("knows_tile_parity", knows_tile_parity, (U,), ("tile number",)),
    Case("subtracts_mean", subtracts_mean, (U,), ("undeclared halo", "tiling")),
    Case("local_place", local_place, (U,), ("tiling",)),
    Case("edge_of_tile", edge_of_tile, (U,), ("tiling",)),
    Case("extra_write", extra_write, (U,), ("wrong writes",)),
    Case("extra_write_sometimes", extra_write_sometimes, (U,), ("wrong writes",)),
    Case("missing_write", missing_write, (U,), ("wrong writes",), writes=("of_missing_write", "w2")),
    Case("padded_write", padded_write, (Read("u", X),), ("wrong writes",)),
    Case("single_precision", single_precision, (U,), ("wrong writes", "raises")),
    Case("half_set", half_set, (U,), ("uninitialised",)),
    Case("adds_to_empty", adds_to_empty, (U,), ("uninitialised",)),
    Case("writes_shared", writes_shared, (U,), ("hidden state",)),
    Case("reads_shared", reads_shared, (U,), ("call order",)),
    Case("writes_file", writes_file, (U,), ("side effect",)),
    Case("divides", divides, (U,), ("raises",)),
]

REDUCTIONS = {
    "rate_of_other": (Reduction("rate_of_other", rate_of_other, (U,), Combine.MAX, as_it_is), "undeclared field"),
    "rate_of_tile_mean": (Reduction("rate_of_tile_mean", rate_of_tile_mean, (U,), Combine.SUM, as_it_is), "tiling"),
    "rate_of_nothing": (Reduction("rate_of_nothing", rate_of_nothing, (U,), Combine.MAX, as_it_is), "unused read"),
    "rate_counting": (Reduction("rate_counting", rate_counting, (U,), Combine.MAX, as_it_is), "hidden state"),
}
__all__ = ["CASES", "REDUCTIONS", "Y"]
