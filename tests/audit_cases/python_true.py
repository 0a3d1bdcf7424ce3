"""Correct steps, some of which look suspicious: none may raise an alarm."""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from functools import cached_property, lru_cache

import numpy as np

from breakstep.errors import KernelError
from breakstep.steps.reduction import Combine, Reduction
from breakstep.steps.splitting import Repeat
from breakstep.steps.step import Array, Call, Read, Step
from tests.audit_cases.common import X2, XY, Arrays, Case, X, Y, as_it_is, own

WEIGHTS = np.array([0.1, 0.2, 0.4])
CALLS: list[int] = []


def five_points(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"]
    mean = u[:, 2:, 1:-1] + u[:, :-2, 1:-1] + u[:, 1:-1, 2:] + u[:, 1:-1, :-2]
    return {"of_five_points": 0.25 * mean - own(u, XY)}


def nine_points(arrays: Arrays, call: Call) -> dict[str, Array]:
    u, (nx, ny, _) = arrays["u"], call.shape
    total = np.zeros((1, *call.shape))
    for i, j in itertools.product(range(3), range(3)):
        total = total + (1.0 + i + 3.0 * j) * u[:, i : i + nx, j : j + ny]
    return {"of_nine_points": total}


def upwind(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"]
    return {"of_upwind": u[:, 1:-1] - 0.3 * (u[:, 1:-1] - u[:, :-2])}


def only_at_shocks(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Looks at ghost zones where its own zones jump by more than the state ever does."""
    u = arrays["u"]
    inner = u[:, 1:-1]
    jump = np.abs(u[:, 2:] - u[:, :-2])
    return {"of_only_at_shocks": np.where(jump > 1e5, 0.5 * (u[:, 2:] + u[:, :-2]), inner)}


def limited(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Slopes limited by minmod: the outer ghost zones matter to the slopes of the inner ones only."""
    u = arrays["u"]
    left, right = u[:, 1:-1] - u[:, :-2], u[:, 2:] - u[:, 1:-1]
    slope = np.where(left * right > 0.0, np.where(np.abs(left) < np.abs(right), left, right), 0.0)
    face = u[:, 1:-1] + 0.5 * slope
    return {"of_limited": face[:, 1:-1] - face[:, :-2]}


def source_of_place(arrays: Arrays, call: Call) -> dict[str, Array]:
    x = np.arange(call.origin[0], call.origin[0] + call.shape[0], dtype=np.float64)
    return {"of_source_of_place": arrays["u"] + np.sqrt(x)[None, :, None, None]}


def coloured(arrays: Arrays, call: Call) -> dict[str, Array]:
    places = np.indices(call.shape).sum(axis=0) + sum(call.origin) + call.cycle
    return {"of_coloured": np.where(places % 2 == 0, arrays["u"], -arrays["u"])}


def advanced(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_advanced": arrays["u"] + call.dt * arrays["w"][:1]}


def both_values(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_both_values": arrays["u"] * call.dt / call.values["other"][0]}


def burns_when_hot(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Uses ``w`` where ``u`` is hotter than it gets in the run."""
    u = arrays["u"]
    return {"of_burns_when_hot": np.where(u > 1e4, u - 0.5 * arrays["w"][1:], u)}


def largest_of_tile(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_largest_of_tile": np.abs(arrays["u"]).max().reshape(1, 1, 1, 1)}


def uses_tile_value(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_uses_tile_value": arrays["u"] / (1.0 + arrays["of_largest_of_tile"])}


def along_x(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"]
    return {"of_along_x": u[:, 2:] - 2.0 * u[:, 1:-1] + u[:, :-2]}


def along_y(arrays: Arrays, call: Call) -> dict[str, Array]:
    u = arrays["u"]
    return {"of_along_y": u[:, :, 2:] - 2.0 * u[:, :, 1:-1] + u[:, :, :-2]}


@lru_cache(maxsize=8)
def _coefficients(count: int) -> Array:
    return 1.0 / (1.0 + np.arange(count, dtype=np.float64))


def keeps_coefficients(arrays: Arrays, call: Call) -> dict[str, Array]:
    """A cache keyed by all that its values depend on."""
    return {"of_keeps_coefficients": arrays["u"] * _coefficients(3).sum()}


def constant_table(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"of_constant_table": np.polyval(WEIGHTS, arrays["u"])}


@dataclass(frozen=True)
class KeepsWeights:
    """Work that depends on its own parameters only, done once."""

    power: float = 1.5

    @cached_property
    def weights(self) -> Array:
        return np.linspace(0.0, 1.0, 5) ** self.power

    def __call__(self, arrays: Arrays, call: Call) -> dict[str, Array]:
        return {"of_keeps_weights": arrays["u"] * self.weights[2]}


def counts_calls(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Counts through the call, and keeps a list for a developer that no result depends on."""
    call.count("zones", arrays["u"].size)
    CALLS.append(call.tile)
    return {"of_counts_calls": arrays["u"] * 2.0}


def refuses_negative(arrays: Arrays, call: Call) -> dict[str, Array]:
    if (arrays["u"] < -1e3).any():
        raise KernelError(f"{call.where()}: u is too negative")
    return {"of_refuses_negative": np.sqrt(arrays["u"] + 1e3)}


def own_generator(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Random numbers that belong to a zone of the mesh and a cycle."""
    made = np.empty(call.shape)
    for zone in np.ndindex(call.shape):
        place = [z + o for z, o in zip(zone, call.origin, strict=True)]
        made[zone] = np.random.default_rng([call.cycle, *place]).random()
    return {"of_own_generator": arrays["u"] + made[None]}


def fills_an_empty_array(arrays: Arrays, call: Call) -> dict[str, Array]:
    made = np.empty_like(arrays["u"])
    made[:, ::2] = arrays["u"][:, ::2]
    made[:, 1::2] = arrays["u"][:, 1::2]
    return {"of_fills_an_empty_array": made}


def overwrites_halves(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Two writes, one of which only copies."""
    return {"of_overwrites_halves": arrays["u"].copy(), "w2": arrays["w"][1:] * 1.0}


def passes(arrays: Arrays, call: Call) -> dict[str, Array]:
    """Three passes with the rim frozen, as an iteration across tiles does: its bits depend on the cut."""
    v = arrays["v"].copy()
    for _ in range(3):
        inner = v[:, 1:-1, 1:-1]
        around = v[:, 2:, 1:-1] + v[:, :-2, 1:-1] + v[:, 1:-1, 2:] + v[:, 1:-1, :-2]
        v[:, 1:-1, 1:-1] = (arrays["u"] + 0.2 * around) / 1.0 + 0.0 * inner
    new = v[:, 1:-1, 1:-1].copy()
    return {"v": new, "moved": np.abs(new - own(arrays["v"], XY)).max().reshape(1, 1, 1, 1)}


def largest_move(arrays: Arrays, call: Call) -> Array:
    return arrays["moved"].reshape(1)


def is_small(value: Array) -> bool:
    return bool(value[0] < 1e-3)


def total(arrays: Arrays, call: Call) -> Array:
    return np.array([arrays["u"].sum(), float(arrays["u"].size)])


def smallest(arrays: Arrays, call: Call) -> Array:
    return np.array([arrays["w"].min()])


U, W = Read("u"), Read("w")

CASES = [
    Case("five_points", five_points, (Read("u", XY),)),
    Case("nine_points", nine_points, (Read("u", XY, corners=True),)),
    Case("upwind", upwind, (Read("u", X),)),
    Case("only_at_shocks", only_at_shocks, (Read("u", X),)),
    Case("limited", limited, (Read("u", X2),)),
    Case("source_of_place", source_of_place),
    Case("coloured", coloured),
    Case("advanced", advanced, (U, W), uses=("dt",)),
    Case("both_values", both_values, uses=("dt", "other")),
    Case("burns_when_hot", burns_when_hot, (U, W)),
    Case("largest_of_tile", largest_of_tile, per_tile=True),
    Case("uses_tile_value", uses_tile_value, (U, Read("of_largest_of_tile"))),
    Case("along_x", along_x, (Read("u", X),)),
    Case("along_y", along_y, (Read("u", Y),)),
    Case("keeps_coefficients", keeps_coefficients),
    Case("constant_table", constant_table),
    Case("keeps_weights", KeepsWeights()),
    Case("counts_calls", counts_calls),
    Case("refuses_negative", refuses_negative),
    Case("own_generator", own_generator),
    Case("fills_an_empty_array", fills_an_empty_array),
    Case("overwrites_halves", overwrites_halves, (U, W), writes=("of_overwrites_halves", "w2")),
]
REDUCTIONS = {
    "total": (Reduction("total", total, (U,), Combine.SUM, as_it_is), ""),
    "smallest": (Reduction("smallest", smallest, (W,), Combine.MIN, as_it_is), ""),
}
REPEATS = (
    Repeat(
        "solve",
        (Step("passes", passes, (Read("v", XY), Read("u")), ("v", "moved")),),
        Reduction("largest_move", largest_move, (Read("moved"),), Combine.MAX, as_it_is),
        is_small,
        60,
    ),
)
FIELDS = (("v", False), ("moved", True))
