"""Runs side by side: recording on and off, lockstep against itself, balanced work with and without barriers.

Contenders take turns, each round gives one ratio, and the ratios are judged by the statistics with which two
runs of a scenario are compared. Lockstep against itself is the same run twice: whatever that statistics calls
a gain there is noise. At 95 % it will do so in one check of twenty.
"""

from __future__ import annotations

from typing import Any

from breakstep.engine.program import Program
from breakstep.engine.run import RunOptions
from breakstep.measure.bench import Bench, Usage
from breakstep.measure.noop import Pace, Ring
from breakstep.measure.timing import in_turn
from breakstep.profile.statistics import Gain, gain_of_pairs

TASK_MS = 5.0  # the lower end of what kernels take on tiles of useful size
TILES = 32


def balanced_ring(pace: Pace, cycles: int) -> Ring:
    """Work that is the same on every tile."""
    return Ring((TILES,), cycles, kernel=pace.busy(TASK_MS))


def recording_figures(bench: Bench, pace: Pace, pairs: int, cycles: int) -> dict[str, Any]:
    """What recording costs: time with over time without it, less 1; wall time, and CPU time of all processes.

    Time ends when the workers have handed over what they noted; writing the profile comes after that.
    """
    ring = balanced_ring(pace, cycles)
    used: dict[str, list[Usage]] = {"on": [], "off": []}
    for number in range(pairs):
        for side in in_turn(used, number):
            used[side].append(bench.run("resident", ring, RunOptions(record=side == "on")))
    wall = gain_of_pairs([one.wall for one in used["on"]], [one.wall for one in used["off"]])
    cpu = gain_of_pairs([one.cpu for one in used["on"]], [one.cpu for one in used["off"]])
    return {"task_ms": TASK_MS, **_above_one(wall), "cpu": _above_one(cpu)}


def _above_one(gain: Gain) -> dict[str, Any]:
    figures = gain_figures(gain)
    return figures | {name: figures[name] - 1.0 for name in ("median", "low", "high")}


def lockstep_figures(bench: Bench, pace: Pace, pairs: int, cycles: int) -> dict[str, dict[str, Any]]:
    """Lockstep over lockstep, and lockstep over tasked, on balanced work: spans of the ledger.

    Parameters
    ----------
    pairs : int
        At least 2, since one pair has no interval.
    """
    ring = balanced_ring(pace, cycles)
    barriers = Program(ring.problem(), ring.tile_shape).template.barrier_names()
    sides = {"lockstep": barriers, "again": barriers, "tasked": ()}
    spans: dict[str, list[float]] = {side: [] for side in sides}
    for number in range(pairs):
        for side in in_turn(sides, number):
            _, profile = bench.record("resident", ring, RunOptions(barriers=sides[side]))
            spans[side].append(profile.ledger.span_ns * 1e-9)
    gains = {name: gain_of_pairs(spans["lockstep"], spans[side]) for name, side in _AGAINST.items()}
    return {name: {"task_ms": TASK_MS, **gain_figures(gain)} for name, gain in gains.items()}


_AGAINST = {"null_gain": "again", "balanced_gain": "tasked"}


def gain_figures(gain: Gain) -> dict[str, Any]:
    """A gain in plain figures."""
    return {
        "median": gain.median,
        "low": gain.low,
        "high": gain.high,
        "significant": gain.significant,
        "pairs": len(gain.ratios),
    }
