"""The resident dispatch's state machine on simulated clusters: any schedule, the serial bits, and nothing left over."""

from __future__ import annotations

import random
from collections import Counter, deque
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from breakstep.engine.program import Program
from breakstep.engine.resident.core import Core, CoreOptions, Save
from breakstep.engine.resident.cycles import cycles_kept
from breakstep.engine.resident.invariants import check
from breakstep.engine.run import RunOptions, RunResult
from breakstep.engine.serial import SerialDispatch
from breakstep.mesh.mesh import Edge
from breakstep.steps.reduction import Combine
from breakstep.steps.splitting import Splitting
from breakstep.steps.step import Array, Read
from tests.mixtures import measured, mixing, mixture, programs
from tests.simulated import Beginning, SimulatedCluster, attributes

DRAWS = settings(deadline=None, suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large])


@dataclass(frozen=True)
class Way:
    """How a program is run."""

    owners: Sequence[int]
    workers: int
    threads: int
    barriers: Sequence[str]
    options: CoreOptions
    seed: int
    repeats: float

    def cluster(self, program: Program, begin: Beginning | None = None, checked: bool = False) -> SimulatedCluster:
        """A cluster that is about to do so."""
        return SimulatedCluster(
            program,
            self.owners,
            self.workers,
            barriers=self.barriers,
            threads=self.threads,
            options=self.options,
            seed=self.seed,
            repeats=self.repeats,
            begin=begin,
            **({"after_each": check} if checked else {}),  # type: ignore[arg-type]
        )


@st.composite
def ways(draw: st.DrawFn, program: Program, every: st.SearchStrategy[int] | None = None) -> Way:
    """One to twelve workers, so that the barrier tree has up to three levels; some own no tile."""
    workers = draw(st.sampled_from([1, 2, 3, 4, 12]))
    seed = draw(st.integers(0, 2**32 - 1))
    generator = random.Random(seed)
    busy = draw(st.integers(1, workers))
    owners = [generator.randrange(busy) + workers - busy for _ in range(len(program.tiling))]
    names = program.template.barrier_names()
    barriers = draw(st.sampled_from([(), names, None]))
    if barriers is None:
        barriers = draw(st.lists(st.sampled_from(names), unique=True))
    options = CoreOptions(
        window=draw(st.integers(1, 4)),
        limit=draw(st.sampled_from([0, 0, 1, 300, 2000])),
        checkpoint_every=draw(every if every is not None else st.integers(0, 2)),
    )
    return Way(owners, workers, draw(st.integers(1, 3)), barriers, options, seed, draw(st.sampled_from([0.0, 0.3])))


def serial(program: Program) -> RunResult:
    """The reference."""
    result = SerialDispatch().run(program, RunOptions(record=False))
    assert result.failure is None
    return result


def assert_same(cluster: SimulatedCluster, fields: dict[str, list[Array]], expected: RunResult) -> None:
    """To the last bit: arrays of all tiles, and the newest results of reductions."""
    for name, tiles in expected.fields.items():
        for tile, array in enumerate(tiles):
            assert np.array_equal(fields[name][tile], array), f"{name} of tile {tile}"
    values = cluster.values()
    assert values.keys() == expected.values.keys()
    for name, rows in expected.values.items():
        assert np.array_equal(values[name][-1], rows[-1]), name


@settings(DRAWS, max_examples=70)
@given(st.data(), programs())
def test_every_invariant_holds_after_every_event(data: st.DataObject, program: Program) -> None:
    """On the way to the serial bits, at the end, and when what was sent arrives again after the end."""
    cluster = data.draw(ways(program)).cluster(program, checked=True)
    assert_same(cluster, cluster.run(), serial(program))


@settings(DRAWS, max_examples=25)
@given(st.data(), programs(st.integers(2, 5)))
def test_a_run_goes_on_from_any_checkpoint(data: st.DataObject, program: Program) -> None:
    """On other workers, after a start in the middle: the bits of the run that was never interrupted."""
    expected = serial(program)
    first = data.draw(ways(program, st.integers(1, 2))).cluster(program)
    assert_same(first, first.run(), expected)
    for cycle, shares in first.saved.items():
        second = data.draw(ways(program)).cluster(program, begin=beginning(program, cycle, shares), checked=True)
        assert_same(second, second.run(), expected)


def beginning(program: Program, cycle: int, shares: Sequence[Save]) -> Beginning:
    """What the shares of all workers make up."""
    tiles = {tile: fields for share in shares for tile, fields in share.tiles.items()}
    assert sorted(tiles) == list(range(len(program.tiling)))
    names = [reduction.name for reduction in program.problem.splitting.reductions]
    values = [shares[0].values[name] for name in names]
    for share in shares:
        assert list(share.values) == names
        assert all(np.array_equal(share.values[n], v) for n, v in zip(names, values, strict=True))
    return Beginning(cycle + 1, tiles, values)


@settings(DRAWS, max_examples=30)
@given(st.data(), programs(st.integers(2, 5)))
def test_each_checkpoint_due_is_saved_once_by_every_worker(data: st.DataObject, program: Program) -> None:
    way = data.draw(ways(program, st.integers(0, 3)))
    cluster = way.cluster(program)
    cluster.run()
    every, ran = way.options.checkpoint_every, cluster.cores[0].cycles_done
    due = [cycle for cycle in range(ran) if every and (cycle + 1) % every == 0]
    assert sorted(cluster.saved) == due
    assert all(len(shares) == way.workers for shares in cluster.saved.values())


@settings(DRAWS, max_examples=5)
@given(st.data(), programs(st.just(1), steady=True))
def test_nothing_accumulates_over_cycles(data: st.DataObject, program: Program) -> None:
    """A run four times as long leaves as much behind; every collection inside the state machine is looked at.

    What may grow is what a run is asked for: the answers by which it can be unrolled again.
    """
    way = data.draw(ways(program))
    ends = [way.cluster(replaced(program, cycles)) for cycles in (10, 40)]
    for cluster in ends:
        cluster.run()
    short, long = ([sizes(core) for core in cluster.cores] for cluster in ends)
    assert short == long


def replaced(program: Program, cycles: int) -> Program:
    """The same program for another number of cycles."""
    return Program(replace(program.problem, cycles=cycles), program.tile_shape, program.fuse)


def sizes(core: Core) -> dict[str, int]:
    """How many objects of each kind can be reached from a state machine, and how long its collections are."""
    found: Counter[str] = Counter()
    seen: set[int] = set()
    left: list[tuple[str, Any]] = [("core", core)]
    while left:
        path, thing = left.pop()
        if id(thing) in seen or path.endswith((".answers", ".unroller", ".plan", ".program")):
            continue
        seen.add(id(thing))
        if isinstance(thing, dict | list | set | frozenset | deque):
            found[path] += len(thing)
            inside = thing.values() if isinstance(thing, dict) else thing
            left += [(f"{path}[]", one) for one in inside]
        elif type(thing).__module__.startswith("breakstep.engine.resident"):
            kind = type(thing).__name__
            found[kind] += 1
            left += [(f"{kind}.{name}", value) for name, value in attributes(thing)]
    return dict(found)


@settings(DRAWS, max_examples=25)
@given(st.data(), programs(st.integers(2, 4)))
def test_a_limit_of_one_byte_gives_each_worker_its_phases_in_order(data: st.DataObject, program: Program) -> None:
    """Run-ahead is what a limit holds back: with the smallest there is none left, and runs still end."""
    way = data.draw(ways(program))
    cluster = replace(way, options=replace(way.options, limit=1)).cluster(program)
    assert_same(cluster, cluster.run(), serial(program))
    for worker in range(way.workers):
        phases = [phase for who, phase, _ in cluster.order if who == worker]
        assert phases == sorted(phases)


@settings(DRAWS, max_examples=10)
@given(st.data(), programs(st.just(4)))
def test_a_limit_does_not_cost_memory(data: st.DataObject, program: Program) -> None:
    """Peaks of five schedules each; the schedules differ, and so do peaks: by 2 % at most in 60 programs tried."""
    way = data.draw(ways(program, st.just(0)))
    peaks = {}
    for limit in (0, 1):
        options = replace(way.options, limit=limit)
        runs = [replace(way, options=options, seed=way.seed + k, repeats=0.0).cluster(program) for k in range(5)]
        for cluster in runs:
            cluster.run()
        peaks[limit] = sum(core.peak_bytes for cluster in runs for core in cluster.cores)
    assert peaks[1] <= 1.05 * peaks[0]


@settings(DRAWS, max_examples=25)
@given(st.data(), programs(st.integers(1, 3)))
def test_in_lockstep_no_task_starts_before_all_of_the_phase_before_are_done(
    data: st.DataObject, program: Program
) -> None:
    """Over all workers; where a value lets nobody run ahead this would hold anyhow, so the reverse is shown below."""
    way = replace(data.draw(ways(program)), barriers=program.template.barrier_names())
    cluster = way.cluster(program)
    cluster.run()
    phases = [phase for _, phase, _ in cluster.order]
    assert phases == sorted(phases)


def chain(cycles: int = 4, lag: int = 1, tiles: int = 12) -> Program:
    """Halo steps on one field, one axis, and a reduction that they use late."""
    steps = [mixing(name, [Read("a", (1, 0, 0))], ["a"], ["r0"]) for name in ("one", "two")]
    splitting = Splitting((tuple(steps),), (measured("r0", "a", Combine.SUM, lag),))
    return Program(mixture(splitting, (tiles,), (Edge.PERIODIC,), cycles), (1,))


def test_without_barriers_phases_and_cycles_overlap() -> None:
    """So that the tests above do not pass for want of freedom."""
    program = chain()
    owners = [tile * 4 // 12 for tile in range(12)]
    overlaps = Counter[str]()
    for seed in range(10):
        cluster = SimulatedCluster(program, owners, 4, threads=2, seed=seed)
        cluster.run()
        phases = [phase for _, phase, _ in cluster.order]
        cycles = [(phase - 2) // 2 for phase in phases]  # phase 1 is the first measurement
        overlaps["phases"] += phases != sorted(phases)
        overlaps["cycles"] += cycles != sorted(cycles)
    assert overlaps["phases"] == 10
    assert overlaps["cycles"] >= 5


@pytest.mark.parametrize("seed", range(6))
def test_everything_may_come_twice_at_any_time(seed: int) -> None:
    """Also long after it was used and forgotten; the cluster checks that the second time changes nothing."""
    program = chain(cycles=8)
    names = program.template.barrier_names() if seed % 2 else ()
    owners = [random.Random(seed).randrange(3) for _ in range(12)]
    cluster = SimulatedCluster(program, owners, 4, barriers=names, seed=seed, repeats=1.0, after_each=check)
    assert_same(cluster, cluster.run(), serial(program))


def test_trees_of_three_levels_over_workers_and_tiles() -> None:
    """75 tiles make trees of 10, 2 and 1 nodes; 75 workers a barrier tree of 1, 8 and 66."""
    program = chain(cycles=2, tiles=75)
    names = program.template.barrier_names()
    for owners in (list(range(75)), [74 - tile for tile in range(75)], [70] * 75):
        cluster = SimulatedCluster(program, owners, 75, barriers=names, seed=1)
        assert_same(cluster, cluster.run(), serial(program))
        for core in cluster.cores:
            check(core)


def test_a_worker_without_tiles_does_not_run_away() -> None:
    """It has nothing to wait for but others' results and releases, and keeps no more of them than those others."""
    program = chain(cycles=50, lag=0)
    names = program.template.barrier_names()
    for barriers in ((), names):
        cluster = SimulatedCluster(program, [1] * 12, 3, barriers=barriers, options=CoreOptions(window=2), seed=3)
        furthest = 0
        while not all(core.finished for core in cluster.cores):
            cluster.step()
            idle, busy = cluster.cores[0], cluster.cores[1]
            furthest = max(furthest, idle.cycles_done - busy.cycles_done)
            assert len(idle.values) <= 4
        assert 1 <= furthest <= cycles_kept(2, 0)


def test_a_fast_worker_does_not_leave_slow_ones_behind_without_bound() -> None:
    """Local steps and a result that no step uses: the trees that others have yet to feed stay few."""
    splitting = Splitting(((mixing("alone", [Read("a")], ["a"]),),), (measured("r0", "a"),))
    program = Program(mixture(splitting, (4,), (Edge.PERIODIC,), 60), (2,))
    cluster = SimulatedCluster(program, [0, 1], 2, options=CoreOptions(window=2), after_each=check)
    cluster.weights.update({(kind, 0): 1.0 for kind in ("start", "take", "finish", "part", "value")})
    cluster.weights.update({(kind, 1): 1e-9 for kind in ("start", "take", "finish", "part", "value")})
    assert_same(cluster, cluster.run(), serial(program))
    phases = [phase for worker, phase, _ in cluster.order if worker == 0]
    behind = [phase for worker, phase, _ in cluster.order if worker == 1]
    assert len(phases) == len(behind) == 61
    first_of_slow = [worker for worker, _, _ in cluster.order].index(1)
    assert first_of_slow == cycles_kept(2, 0)  # -1 to 1: the first measurement and two cycles
