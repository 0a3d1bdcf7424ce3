"""The resident dispatch's state machine on simulated clusters: any schedule, the serial bits, and nothing left over."""

from __future__ import annotations

import random
from collections import Counter, deque
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from breakstep.engine.program import Program
from breakstep.engine.resident.core import Core, CoreOptions, Save
from breakstep.engine.resident.invariants import check
from breakstep.engine.run import RunOptions, RunResult
from breakstep.engine.serial import SerialDispatch
from breakstep.steps.step import Array
from tests.mixtures import programs
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


@settings(DRAWS, max_examples=1500)
@given(st.data(), programs())
def test_every_invariant_holds_after_every_event(data: st.DataObject, program: Program) -> None:
    """On the way to the serial bits, at the end, and when what was sent arrives again after the end."""
    cluster = data.draw(ways(program)).cluster(program, checked=True)
    assert_same(cluster, cluster.run(), serial(program))


@settings(DRAWS, max_examples=700)
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
def test_every_cycle_due_is_saved_once_by_every_worker(data: st.DataObject, program: Program) -> None:
    way = data.draw(ways(program, st.integers(0, 3)))
    cluster = way.cluster(program)
    cluster.run()
    every, ran = way.options.checkpoint_every, cluster.cores[0].cycles_done
    due = [cycle for cycle in range(ran) if every and (cycle + 1) % every == 0]
    assert sorted(cluster.saved) == due
    assert all(len(shares) == way.workers for shares in cluster.saved.values())


@settings(DRAWS, max_examples=150)
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
