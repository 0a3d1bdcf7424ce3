"""Event replay of tiles x cycles with fewer workers than tiles; nothing is stored a task, a few numbers a tile.

The rules are those of :mod:`breakstep.forecast.dynamic` in program order (phase, then tile), every tile on its
owner, links without contention. A tile is in one phase at a time, so its state is: phases done, inputs missing
for the next, the latest arrival among those there, and the ends of its last few phases, which a
neighbour that is behind may still have to receive. Who needs a tile must be needed by it (offsets come in
pairs), or tiles could run ahead without limit.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np

from breakstep.errors import ForecastError
from breakstep.forecast.graph import BARRIER, STEP, Int32s, Int64s, Number, ReplayGraph, build_graph
from breakstep.forecast.laws import Floats
from breakstep.forecast.model import MachineModel
from breakstep.forecast.results import Counts
from breakstep.forecast.tiles import TiledSplitting, packed_costs
from breakstep.profile.compiling import compiled_loop


@dataclass(frozen=True)
class TilesReplay:
    """What the replay found; times as in :class:`breakstep.forecast.results.Replay`.

    Parameters
    ----------
    makespan_ns : int
    phase_ns : ndarray of int64, shape (phases,)
        End of the last task of each phase [ns].
    busy_ns, overhead_ns, idle_ns, received_bytes : ndarray of int64, shape (workers,)
    messages : int
    """

    makespan_ns: int
    phase_ns: Int64s
    busy_ns: Int64s
    overhead_ns: Int64s
    idle_ns: Int64s
    received_bytes: Int64s
    messages: int


def replay_tiles(splitting: TiledSplitting, machine: MachineModel, worker_of_tile: Int32s) -> TilesReplay:
    """Play a splitting with each tile on its worker.

    Parameters
    ----------
    splitting : TiledSplitting
    machine : MachineModel
    worker_of_tile : ndarray of int32, shape (tiles,)

    Raises
    ------
    ForecastError
        The machine has contention, offsets do not come in pairs, a slack is not 1, or a tile is on no worker.
    """
    owner = np.ascontiguousarray(worker_of_tile, dtype=np.int32)
    _check(splitting, machine, owner)
    table, directions = splitting.neighbours()
    counts = Counts.none(machine.workers)
    ends = np.full(splitting.phases, -1, dtype=np.int64)
    bins = np.zeros(machine.workers + 1, dtype=np.int64)
    np.cumsum(np.bincount(owner, minlength=machine.workers), out=bins[1:])
    transfer = np.array([machine.transfer_ns(stage.halo_bytes) for stage in splitting.stages], dtype=np.int64)
    size = np.array([stage.halo_bytes for stage in splitting.stages], dtype=np.int64)
    gates = splitting.gate_phases()
    _play(
        np.int64(splitting.seed),
        packed_costs(splitting.stages),
        (table, directions, transfer, size),
        gates,
        owner,
        bins,
        (machine.threads, machine.overhead_ns, machine.tree_ns),
        ends,
        (counts.busy_ns, counts.started, counts.received_bytes, counts.messages),
    )
    makespan = int(ends.max(initial=0))
    overhead = counts.started * machine.overhead_ns
    idle = machine.threads * makespan - counts.busy_ns - overhead
    return TilesReplay(
        makespan, ends, counts.busy_ns, overhead, idle, counts.received_bytes, int(counts.messages.sum())
    )


def task_costs(splitting: TiledSplitting) -> Int64s:
    """Durations of all tasks, shape (phases, tiles) [ns]: the same that the engines draw."""
    costs = np.empty((splitting.phases, splitting.tiles), dtype=np.int64)
    _all_costs(np.int64(splitting.seed), packed_costs(splitting.stages), costs)
    return costs


def stored_graph(splitting: TiledSplitting) -> ReplayGraph:
    """A small splitting as a stored graph: task number is phase x (tiles + 1) + tile.

    The last task of each phase is a barrier node, whose edges have the kind ``barrier:stage S``.
    """
    tiles, stages = splitting.tiles, len(splitting.stages)
    table, directions = splitting.neighbours()
    costs = np.zeros((splitting.phases, tiles + 1), dtype=np.int64)
    costs[:, :tiles] = task_costs(splitting)
    gated = {(gate.stage, number, gate.back) for number, stage in enumerate(splitting.stages) for gate in stage.gates}
    at = np.arange(tiles)
    edges: list[tuple[Any, Any, int, int]] = []  # producers, consumers, bytes, kind
    for phase in range(splitting.phases):
        here, cycle, stage = phase * (tiles + 1), phase // stages, phase % stages
        if any(origin == stage for origin, _, _ in gated):
            edges.append((here + at, np.full(tiles, here + tiles), 0, 1 + stage))
        for origin, number, back in gated:
            if number == stage and cycle >= back:
                gate = ((cycle - back) * stages + origin) * (tiles + 1) + tiles
                edges.append((np.full(tiles, gate), here + at, 0, 1 + origin))
        if phase == 0:
            continue
        edges.append((here - tiles - 1 + at, here + at, 0, 0))
        for place in range(table.shape[1]):
            there = table[:, place]
            if directions[stage] >> place & 1:
                some = there >= 0
                size = splitting.stages[stage].halo_bytes
                edges.append((here - tiles - 1 + there[some], here + at[some], size, 0))
    kind = np.full((splitting.phases, tiles + 1), STEP)
    kind[:, tiles] = BARRIER
    return build_graph(
        costs.ravel(),
        np.concatenate([edge[0] for edge in edges]) if edges else [],
        np.concatenate([edge[1] for edge in edges]) if edges else [],
        kind=kind.ravel().astype(np.int8),
        tile=np.tile(np.append(at, -1), splitting.phases).astype(np.int32),
        cycle=np.repeat(np.arange(splitting.phases) // stages, tiles + 1).astype(np.int32),
        edge_bytes=np.concatenate([np.full(len(edge[0]), edge[2]) for edge in edges]) if edges else [],
        edge_kind=np.concatenate([np.full(len(edge[0]), edge[3], dtype=np.int8) for edge in edges]) if edges else [],
        name=np.repeat(np.arange(splitting.phases) % stages, tiles + 1).astype(np.int32),
        names=tuple(f"stage {stage}" for stage in range(stages)),
        edge_kinds=("data", *(f"barrier:stage {stage}" for stage in range(stages))),
    )


def _check(splitting: TiledSplitting, machine: MachineModel, owner: Int32s) -> None:
    faults = []
    if machine.contention:
        faults.append("links with contention need a stored graph; expected a machine without")
    for number, stage in enumerate(splitting.stages):
        offsets = set(stage.offsets)
        if stage.slack != 1 or any((-a, -b, -c) not in offsets for a, b, c in offsets):
            faults.append(f"stage {number} needs neighbours in one direction or with slack; use the sweep")
    if len(owner) != splitting.tiles or owner.min() < 0 or owner.max() >= machine.workers:
        faults.append(f"expected {splitting.tiles} tiles on workers 0 to {machine.workers - 1}")
    if faults:
        raise ForecastError("Tiles cannot be played: " + "; ".join(faults) + ".", faults=faults)


@compiled_loop
def _push(heap: Int64s, size: Number, time: Number, code: Number) -> Number:
    """Add an event to a heap of pairs (time, code); the new size."""
    at = size
    while at > 0:
        up = (at - 1) >> 1
        if heap[up, 0] < time or (heap[up, 0] == time and heap[up, 1] <= code):
            break
        heap[at, 0] = heap[up, 0]
        heap[at, 1] = heap[up, 1]
        at = up
    heap[at, 0] = time
    heap[at, 1] = code
    return size + 1


@compiled_loop
def _pop(heap: Int64s, size: Number) -> Number:
    """Take the first event away; the new size."""
    size -= 1
    time, code = heap[size, 0], heap[size, 1]
    at = 0
    while True:
        child = 2 * at + 1
        if child >= size:
            break
        right = child + 1
        if right < size and (
            heap[right, 0] < heap[child, 0] or (heap[right, 0] == heap[child, 0] and heap[right, 1] < heap[child, 1])
        ):
            child = right
        if time < heap[child, 0] or (time == heap[child, 0] and code <= heap[child, 1]):
            break
        heap[at, 0] = heap[child, 0]
        heap[at, 1] = heap[child, 1]
        at = child
    heap[at, 0] = time
    heap[at, 1] = code
    return size


@compiled_loop
def _push_key(keys: Int64s, base: Number, size: Number, key: Number) -> None:
    """Add a ready task to the heap of keys that begins at ``base``."""
    at = size
    while at > 0:
        up = (at - 1) >> 1
        if keys[base + up] <= key:
            break
        keys[base + at] = keys[base + up]
        at = up
    keys[base + at] = key


@compiled_loop
def _pop_key(keys: Int64s, base: Number, size: Number) -> Number:
    """Take the first key away from the heap at ``base`` that held ``size``; the key."""
    first = keys[base]
    size -= 1
    key = keys[base + size]
    at = 0
    while True:
        child = 2 * at + 1
        if child >= size:
            break
        if child + 1 < size and keys[base + child + 1] < keys[base + child]:
            child += 1
        if key <= keys[base + child]:
            break
        keys[base + at] = keys[base + child]
        at = child
    keys[base + at] = key
    return first


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
def _all_costs(seed: Any, costs: Any, found: Any) -> Any:
    patterns, where, cells, tables = costs
    stages = len(where)
    for phase in range(found.shape[0]):
        stage, cycle, key = phase % stages, phase // stages, _key(seed, phase)
        begin, frames, width, law, table = where[stage]
        for tile in range(found.shape[1]):
            mean = patterns[begin + (cycle % frames) * width + cells[stage, tile]]
            found[phase, tile] = _drawn(mean, law, tables, table, key, tile)


@compiled_loop
def _play(
    seed: Any, costs: Any, stencil: Any, gates: Any, owner: Any, bins: Any, numbers: Any, ends: Any, counts: Any
) -> Any:
    """The event loop. A finish has code tile + ``finishing``, an arrival the tile alone."""
    patterns, where, cells, tables = costs
    table_of, directions, transfer, size_of = stencil
    gate_stage, gate_back = gates
    threads, overhead, tree = numbers
    busy, started, received, messages = counts
    tiles, stages, phases, workers = len(owner), len(where), len(ends), len(bins) - 1
    widest, most_gates = table_of.shape[1], gate_stage.shape[1]
    kept = stages + 1  # a neighbour is at most one round of stages ahead
    finishing = np.int64(1) << 32
    low = finishing - 1
    heap = np.empty((tiles + 1, 2), dtype=np.int64)
    size = 0
    ready = np.empty(tiles, dtype=np.int64)
    readies = np.zeros(workers, dtype=np.int64)
    free = np.full(workers, threads, dtype=np.int64)
    touched = np.empty(workers, dtype=np.int64)
    marked = np.zeros(workers, dtype=np.bool_)
    touches = 0
    finished = np.zeros(tiles, dtype=np.int32)
    missing = np.zeros(tiles, dtype=np.int32)
    there = np.zeros(tiles, dtype=np.int64)
    history = np.zeros((tiles, kept), dtype=np.int64)
    passed = np.zeros(phases, dtype=np.int32)
    waiter = np.full(phases, -1, dtype=np.int64)  # first of the list of (tile, gate) pairs waiting for a phase
    next_waiter = np.full(tiles * most_gates, -1, dtype=np.int64)
    if phases == 0:
        return
    for tile in range(tiles):
        worker = owner[tile]
        _push_key(ready, bins[worker], readies[worker], np.int64(tile))
        readies[worker] += 1
        if not marked[worker]:
            marked[worker] = True
            touched[touches] = worker
            touches += 1
    while True:
        now = np.int64(0) if size == 0 else heap[0, 0]
        while size > 0 and heap[0, 0] == now:
            code = heap[0, 1]
            size = _pop(heap, size)
            tile = code & low
            worker = owner[tile]
            if code < finishing:
                _push_key(ready, bins[worker], readies[worker], (np.int64(finished[tile]) << 32) + tile)
                readies[worker] += 1
                if not marked[worker]:
                    marked[worker] = True
                    touched[touches] = worker
                    touches += 1
                continue
            free[worker] += 1
            if not marked[worker]:
                marked[worker] = True
                touched[touches] = worker
                touches += 1
            phase = np.int64(finished[tile])
            history[tile, phase % kept] = now
            following = phase + 1
            finished[tile] = following
            passed[phase] += 1
            if passed[phase] == tiles:
                ends[phase] = now
                pair = waiter[phase]
                while pair >= 0:
                    other = pair // most_gates
                    missing[other] -= 1
                    there[other] = max(there[other], now + tree)
                    if missing[other] == 0:
                        home = owner[other]
                        if there[other] > now:
                            size = _push(heap, size, there[other], other)
                        else:
                            _push_key(ready, bins[home], readies[home], (np.int64(finished[other]) << 32) + other)
                            readies[home] += 1
                            if not marked[home]:
                                marked[home] = True
                                touched[touches] = home
                                touches += 1
                    pair = next_waiter[pair]
            if following == phases:
                continue
            stage, cycle = following % stages, following // stages
            lacking = 0
            latest = now
            for place in range(widest):
                if not (directions[stage] >> place) & 1:
                    continue
                other = table_of[tile, place]
                if other < 0:
                    continue
                home = owner[other]
                cost = np.int64(0)
                if home != worker:
                    cost = transfer[stage]
                    received[worker] += size_of[stage]
                    messages[worker] += 1
                if finished[other] >= following:
                    latest = max(latest, history[other, phase % kept] + cost)
                else:
                    lacking += 1
                if finished[other] == following:  # it waits for this task, among others
                    there[other] = max(there[other], now + cost)
                    missing[other] -= 1
                    if missing[other] == 0:
                        if there[other] > now:
                            size = _push(heap, size, there[other], np.int64(other))
                        else:
                            _push_key(ready, bins[home], readies[home], (following << 32) + other)
                            readies[home] += 1
                            if not marked[home]:
                                marked[home] = True
                                touched[touches] = home
                                touches += 1
            for place in range(most_gates):
                gate = (cycle - gate_back[stage, place]) * stages + gate_stage[stage, place]
                if gate_stage[stage, place] < 0 or gate < 0:
                    continue
                if passed[gate] == tiles:
                    latest = max(latest, ends[gate] + tree)
                else:
                    lacking += 1
                    pair = tile * most_gates + place
                    next_waiter[pair] = waiter[gate]
                    waiter[gate] = pair
            missing[tile] = lacking
            there[tile] = latest
            if lacking > 0:
                continue
            if latest > now:
                size = _push(heap, size, latest, tile)
            else:
                _push_key(ready, bins[worker], readies[worker], (following << 32) + tile)
                readies[worker] += 1
        for spot in range(touches):
            worker = touched[spot]
            marked[worker] = False
            while free[worker] > 0 and readies[worker] > 0:
                tile = _pop_key(ready, bins[worker], readies[worker]) & low
                readies[worker] -= 1
                free[worker] -= 1
                phase = np.int64(finished[tile])
                stage, cycle = phase % stages, phase // stages
                begin, frames, width, law, table = where[stage]
                mean = patterns[begin + (cycle % frames) * width + cells[stage, tile]]
                length = _drawn(mean, law, tables, table, _key(seed, phase), tile)
                busy[worker] += length
                started[worker] += 1
                size = _push(heap, size, now + overhead + length, finishing + tile)
        touches = 0
        if size == 0:
            return
