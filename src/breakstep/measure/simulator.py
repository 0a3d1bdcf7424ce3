"""How fast the forecast's replay engines are on this machine, on graphs of the sizes that are asked for.

The graphs are invented: 100 x 100 tiles, six stages, a hot spot that moves in one of them, random factors. Seconds are
of the clock on the wall, the best of a few rounds; compiling does not count, nor does making a graph, but
sorting its edges by producer does. Knows the sizes and what is required; refuses to know how figures are shown.
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import asdict, dataclass, replace
from typing import Any

import numpy as np

from breakstep.errors import ForecastError
from breakstep.forecast.dynamic import replay_owner
from breakstep.forecast.fixed import Schedule, Variant, fixed_makespans
from breakstep.forecast.graph import Int32s, ReplayGraph
from breakstep.forecast.implicit import stored_graph
from breakstep.forecast.laws import Cost, Law
from breakstep.forecast.model import MachineModel
from breakstep.forecast.subsets import subset_makespans, subset_replays
from breakstep.forecast.sweep import sweep_tiles
from breakstep.forecast.tiles import TiledSplitting, TileStage, along

MEAN_NS = 1_000_000
SIDE = 100
STAGES = 6
WORKERS = 256
VARIANTS = 20
LINK = {"overhead_ns": 30_000, "alpha_ns": 20_000, "ps_per_byte": 870, "contention": True, "hop_ns": 10_000}
"""An invented cluster on 10 Gb/s Ethernet: bandwidth and latency are common practice."""
MEMORY_MIB = 200

Progress = Callable[[str], None]


@dataclass(frozen=True)
class Speed:
    """One measurement; ``needed_s`` and ``needed_mib`` are None where nothing is asked for.

    ``tasks`` counts every task as often as it is played. ``met`` is None where the size is not the one asked about.
    """

    what: str
    tasks: int
    seconds: float
    needed_s: float | None = None
    memory_mib: float | None = None
    needed_mib: float | None = None
    met: bool | None = None
    found: str = ""


@dataclass(frozen=True)
class Sizes:
    """How large; the full sizes are those that something is required of."""

    cycles: int
    tile_cycles: int
    sweep_side: int
    sweep_cycles: int
    rounds: int
    judged: bool


FULL = Sizes(cycles=17, tile_cycles=10_000, sweep_side=1000, sweep_cycles=1000, rounds=3, judged=True)
QUICK = Sizes(cycles=2, tile_cycles=100, sweep_side=320, sweep_cycles=20, rounds=1, judged=False)


def simulator_figures(quick: bool = False, progress: Progress = lambda what: None) -> dict[str, Any]:
    """Measure everything; plain figures, ready for JSON: ``quick``, ``cores``, ``rows``."""
    sizes = QUICK if quick else FULL
    rows = []
    for speed in _measured(sizes, progress):
        enough = speed.needed_s is not None and speed.seconds <= speed.needed_s
        if speed.needed_mib is not None and speed.memory_mib is not None:
            enough = enough and speed.memory_mib <= speed.needed_mib
        judged = sizes.judged and speed.needed_s is not None
        rows.append(asdict(replace(speed, met=enough if judged else None)))
    return {"quick": quick, "cores": _cores(), "rows": rows}


def _measured(sizes: Sizes, progress: Progress) -> Iterator[Speed]:
    progress("compiling")
    _stored(replace(sizes, cycles=1), 1, 1)
    _tiles_apart(QUICK)
    yield from _stored(sizes, VARIANTS, STAGES, progress)
    progress("tiles x cycles by rule, more tiles than workers")
    yield _tiles_apart(sizes)
    for lockstep in (True, False):
        progress(f"a worker per tile, {'lockstep' if lockstep else 'tasked'}")
        yield _sweep(sizes, lockstep)


def bench_splitting(cycles: int) -> TiledSplitting:
    """Six stages on 100 x 100 tiles; in the third a spot ten times as costly walks along a row."""
    spot = np.full((SIDE, SIDE * SIDE), MEAN_NS, dtype=np.int64)
    spot[np.arange(SIDE), SIDE * SIDE // 2 + np.arange(SIDE)] *= 10
    random = Law.of(lambda u: 0.5 + u)
    even = Cost.even(SIDE * SIDE, MEAN_NS, random)
    axes = ((0,), (1,), (), (0, 1), (0,), (1,))
    stages = [
        TileStage(Cost.mapped(spot, random) if number == 2 else even, along(*axis), 8000)
        for number, axis in enumerate(axes)
    ]
    return TiledSplitting((SIDE, SIDE), cycles, tuple(stages), periodic=False)


def blocks(tiles_a_side: int, workers: int) -> Int32s:
    """Worker of each tile when tiles are dealt out in equal runs of rows; shape (tiles,)."""
    tiles = tiles_a_side**2
    return (np.arange(tiles) * workers // tiles).astype(np.int32)


def _stored(sizes: Sizes, variants: int, kinds: int, progress: Progress = lambda what: None) -> list[Speed]:
    """Replays of a stored graph in lockstep: one, what-ifs, and all subsets of its barriers."""
    splitting = bench_splitting(sizes.cycles)
    graph = stored_graph(splitting.lockstep())
    machine = MachineModel(WORKERS, **LINK)  # type: ignore[arg-type]
    owner = graph.owners(blocks(SIDE, WORKERS))
    barriers = graph.kinds_of("barrier:")[:kinds]
    tasks = splitting.tasks
    title = f"{tasks:,} tasks, {WORKERS} workers"
    progress(title)
    replayed = replay_owner(graph, machine, owner)
    order = Schedule.of(replayed)
    machines = _machines(machine, variants)
    whatifs = [Variant(one) for one in machines]
    subsets, lifted = 1 << len(barriers), graph.without(barriers)
    steps = (
        ("event replay, tasked", 1.0, 1, lambda: replay_owner(_fresh(graph), machine, owner, None, lifted)),
        ("event replay, lockstep", 1.0, 1, lambda: replay_owner(_fresh(graph), machine, owner)),
        (f"{variants} what-ifs, replayed", 10.0, variants, lambda: _replays(graph, machines, owner)),
        (f"{variants} what-ifs, fixed order", 10.0, variants, lambda: fixed_makespans(graph, order, whatifs)),
        (f"{subsets} subsets, fixed order", 10.0, subsets, lambda: subset_makespans(graph, machine, order, barriers)),
        (f"{subsets} subsets, replayed", 10.0, subsets, lambda: subset_replays(graph, machine, owner, barriers)),
    )  # fmt: skip
    speeds = []
    for what, needed, times, work in steps:
        progress(what)
        speeds.append(Speed(f"{title}: {what}", tasks * times, _best(work, sizes.rounds), needed))
    return speeds


def _machines(machine: MachineModel, count: int) -> list[MachineModel]:
    """What-ifs about the dispatch and the network."""
    return [replace(machine, overhead_ns=1000 * at, alpha_ns=2000 * at) for at in range(count)]


def _replays(graph: ReplayGraph, machines: Sequence[MachineModel], owner: Int32s) -> None:
    with ThreadPoolExecutor(2) as pool:
        list(pool.map(lambda machine: replay_owner(graph, machine, owner).makespan_ns, machines))


def _fresh(graph: ReplayGraph) -> ReplayGraph:
    """The same graph, its edges not yet sorted by producer."""
    return replace(graph)


def _best(work: Callable[[], object], rounds: int) -> float:
    seconds = []
    for _ in range(rounds):
        started = time.perf_counter()
        work()
        seconds.append(time.perf_counter() - started)
    return min(seconds)


def _tiles_apart(sizes: Sizes) -> Speed:
    """In a process of its own, whose memory is then this measurement's alone."""
    command = [sys.executable, "-m", "breakstep.measure.tiles_alone", str(SIDE), str(sizes.tile_cycles), str(WORKERS)]
    answer = subprocess.run(command, capture_output=True, text=True, check=False)
    if answer.returncode != 0:
        raise ForecastError(f"The process that measures memory ended with code {answer.returncode}: {answer.stderr}")
    found = json.loads(answer.stdout)
    what = f"{found['tasks']:,} tasks by rule, {WORKERS} workers"
    return Speed(what, found["tasks"], found["seconds"], 30.0, found["memory_mib"], MEMORY_MIB)


def _sweep(sizes: Sizes, lockstep: bool) -> Speed:
    side, cycles = sizes.sweep_side, sizes.sweep_cycles
    cost = Cost.even(side * side, MEAN_NS, Law.exponential())
    splitting = TiledSplitting((side, side), cycles, (TileStage(cost, along(0, 1)),))
    played = splitting.lockstep() if lockstep else splitting
    machine = MachineModel(side * side)
    sweep_tiles(replace(played, cycles=2), machine)
    started = time.perf_counter()
    found = sweep_tiles(played, machine)
    seconds = time.perf_counter() - started
    mode = "lockstep" if lockstep else "tasked"
    step = found.makespan_ns / cycles / MEAN_NS
    note = f"{step:.3f} mean tasks a step"
    if lockstep:
        note += f" (H of {side * side:,} = {harmonic(side * side):.3f})"
    return Speed(
        f"{splitting.tasks:,} tasks, {side * side:,} workers, {mode}", splitting.tasks, seconds, 20.0, found=note
    )


def harmonic(count: int) -> float:
    """1 + 1/2 + ... + 1/count: the mean of the longest of so many exponential times of mean 1."""
    return float(np.sum(1.0 / np.arange(1, count + 1)))


def _cores() -> int:
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
