"""Tiles with a worker each, phase after phase: for as many workers as there is memory for a few numbers each.

With a worker to itself a tile's task starts when its inputs are there, so no events are needed: a phase is a
maximum over neighbours and an addition, on whole rows. The phases of a large box are cut in two for two
threads. Lockstep is the same with a gate behind every phase.
"""

from __future__ import annotations

import math
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any

import numpy as np

from breakstep.forecast.graph import Int64s, Number
from breakstep.forecast.laws import Floats
from breakstep.forecast.model import MachineModel
from breakstep.forecast.tiles import TiledSplitting, packed_costs
from breakstep.profile.compiling import compiled_loop

SHARED_TILES = 100_000  # a phase of fewer tiles takes less than a millisecond, not worth a second thread
_BLOCK = 2048  # tiles whose start times are put together before costs are added: 16 KiB, half a first-level cache


@dataclass(frozen=True)
class Sweep:
    """What the sweep found.

    Parameters
    ----------
    phase_ns : ndarray of int64, shape (phases,)
        End of the last task of each phase [ns].
    work_ns : int
        Sum of all durations, without overhead [ns].
    finish_ns : ndarray of int64, shape (tiles,)
        End of each tile's last task [ns].
    """

    phase_ns: Int64s
    work_ns: int
    finish_ns: Int64s

    @property
    def makespan_ns(self) -> int:
        """End of the last task [ns]."""
        return int(self.phase_ns.max(initial=0))


def sweep_tiles(splitting: TiledSplitting, machine: MachineModel, jobs: int = 2) -> Sweep:
    """Play tiles with a worker each; of the machine, workers, threads and contention are not looked at.

    ``machine.tree_ns`` is that of a tree over ``machine.workers``.
    """
    depth = 1 + max(stage.slack for stage in splitting.stages)
    history = np.zeros((depth, splitting.tiles), dtype=np.int64)
    ends = np.zeros(splitting.phases, dtype=np.int64)
    offsets, counts = _offsets(splitting)
    arguments = (
        np.array(splitting.box, dtype=np.int64),
        splitting.periodic,
        np.int64(splitting.seed),
        packed_costs(splitting.stages),
        (offsets, counts, np.array([stage.slack for stage in splitting.stages], dtype=np.int64)),
        splitting.gate_phases(),
        np.array([machine.transfer_ns(stage.halo_bytes) for stage in splitting.stages], dtype=np.int64),
        (machine.overhead_ns, machine.tree_ns),
        history,
        ends,
    )
    if jobs < 2 or splitting.tiles < SHARED_TILES:
        work = int(_phases(*arguments))
    else:
        work = _in_parts(splitting, jobs, arguments)
    return Sweep(ends, work, history[(splitting.phases - 1) % depth].copy())


def _in_parts(splitting: TiledSplitting, jobs: int, arguments: tuple) -> int:  # type: ignore[type-arg]
    cuts = np.linspace(0, splitting.tiles, jobs + 1).round().astype(np.int64)
    ends, work = arguments[-1], 0
    with ThreadPoolExecutor(jobs) as pool:
        for phase in range(splitting.phases):
            parts = [pool.submit(_phase, phase, cuts[job], cuts[job + 1], *arguments) for job in range(jobs)]
            found = [part.result() for part in parts]
            ends[phase] = max(int(end) for end, _ in found)
            work += sum(int(part) for _, part in found)
    return work


def _offsets(splitting: TiledSplitting) -> tuple[Int64s, Int64s]:
    """Offsets of each stage, shape (stages, most, 3), and how many."""
    kept = [splitting.inner_offsets(stage) for stage in splitting.stages]
    table = np.zeros((len(kept), max(1, *map(len, kept), 1), 3), dtype=np.int64)
    for at, offsets in enumerate(kept):
        for place, offset in enumerate(offsets):
            table[at, place] = offset
    return table, np.array([len(offsets) for offsets in kept], dtype=np.int64)


@compiled_loop
def _key(seed: Number, phase: Number) -> Number:
    """What the random numbers of one phase begin with."""
    z = np.uint64(seed) * np.uint64(0x9E3779B97F4A7C15) + np.uint64(phase)
    z = (z ^ (z >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    z = (z ^ (z >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return z ^ (z >> np.uint64(31))


@compiled_loop
def _variate(key: Number, tile: Number) -> Number:
    """Exponential variate of a tile: the finaliser of splitmix64 on a counter (Steele, Lea, Flood 2014)."""
    z = key + np.uint64(tile) * np.uint64(0x9E3779B97F4A7C15)
    z = (z ^ (z >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    z = (z ^ (z >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    z = z ^ (z >> np.uint64(31))
    return -math.log((np.float64(z >> np.uint64(11)) + 0.5) * 2.0**-53)


@compiled_loop
def _drawn(mean: Number, law: Number, table: Floats, begin: Number, key: Number, tile: Number) -> Number:
    """Duration of one task [ns]."""
    if law == 0:
        return mean
    v = _variate(key, tile)
    if law == 1:
        return np.int64(mean * v)
    place = v * 256.0
    at = np.int64(place)
    low, high = table[begin + at], table[begin + at + 1]
    return np.int64(mean * (low + (place - at) * (high - low)))


@compiled_loop
def _phases(
    box: Any,
    periodic: Any,
    seed: Any,
    costs: Any,
    stencil: Any,
    gates: Any,
    transfer: Any,
    numbers: Any,
    history: Any,
    ends: Any,
) -> Any:
    """All phases one after another; the work done."""
    work = np.int64(0)
    for phase in range(len(ends)):
        end, part = _phase(
            phase, 0, history.shape[1], box, periodic, seed, costs, stencil, gates, transfer, numbers, history, ends
        )
        ends[phase] = end
        work += part
    return work


@compiled_loop
def _phase(
    phase: Any,
    low: Any,
    high: Any,
    box: Any,
    periodic: Any,
    seed: Any,
    costs: Any,
    stencil: Any,
    gates: Any,
    transfer: Any,
    numbers: Any,
    history: Any,
    ends: Any,
) -> Any:
    """Tiles from ``low`` to ``high`` of one phase; their latest end and their work."""
    patterns, where, cells, tables = costs
    offsets, counts, slacks = stencil
    overhead, tree = numbers
    depth, stages = history.shape[0], len(counts)
    stage, cycle = phase % stages, phase // stages
    floor = np.int64(0)
    for place in range(gates[0].shape[1]):
        gate = (cycle - gates[1][stage, place]) * stages + gates[0][stage, place]
        if gates[0][stage, place] >= 0 and gate >= 0:
            floor = max(floor, ends[gate] + tree)
    before = history[(phase - 1) % depth]
    source = history[(phase - slacks[stage]) % depth]
    target = history[phase % depth]
    begin, frames, width, law, table = where[stage]
    pattern = patterns[begin + (cycle % frames) * width : begin + (cycle % frames + 1) * width]
    key = _key(seed, phase)
    latest, work = np.int64(0), np.int64(0)
    row = box[2]
    while low < high:
        until = min(high, low + _BLOCK, (low // row + 1) * row)
        for tile in range(low, until):
            target[tile] = max(before[tile], floor)
        if phase >= slacks[stage]:
            for place in range(counts[stage]):
                _gather(target, source, low, until, box, offsets[stage, place], periodic, transfer[stage])
        for tile in range(low, until):
            length = _drawn(pattern[cells[stage, tile]], law, tables, table, key, tile)
            work += length
            end = target[tile] + overhead + length
            target[tile] = end
            latest = max(latest, end)
        low = until
    return latest, work


@compiled_loop
def _gather(
    target: Any,
    source: Any,
    low: Any,
    until: Any,
    box: Any,
    offset: Any,
    periodic: Any,
    transfer: Any,
) -> Any:
    """Raise start times within one row to the arrivals from one direction."""
    row, column = low // box[2], low % box[2]
    first, second = row // box[1] + offset[0], row % box[1] + offset[1]
    if periodic:
        first, second = first % box[0], second % box[1]
    elif first < 0 or first >= box[0] or second < 0 or second >= box[1]:
        return
    there = (first * box[1] + second) * box[2]
    here = low - column
    begin, end = column, column + until - low
    if offset[2] < 0 and begin == 0:
        if periodic:
            target[here] = max(target[here], source[there + box[2] - 1] + transfer)
        begin = 1
    if offset[2] > 0 and end == box[2]:
        if periodic:
            target[here + end - 1] = max(target[here + end - 1], source[there] + transfer)
        end -= 1
    shift = there + offset[2]
    for at in range(begin, end):
        target[here + at] = max(target[here + at], source[shift + at] + transfer)
