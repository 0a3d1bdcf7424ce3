"""Three engines, one splitting: stored graph, tiles by rule, and the sweep with a worker a tile, to the nanosecond."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from breakstep.forecast.dynamic import replay_owner
from breakstep.forecast.implicit import replay_tiles, stored_graph, task_costs
from breakstep.forecast.laws import Cost, Law
from breakstep.forecast.model import MachineModel
from breakstep.forecast.sweep import sweep_tiles
from breakstep.forecast.tiles import Gate, TiledSplitting, TileStage, along, around


def random_splitting(rng: np.random.Generator) -> TiledSplitting:
    """One to three axes, few tiles; short times, so that many events share a moment."""
    dimensions = int(rng.integers(1, 4))
    shape = tuple(int(side) for side in rng.integers(1, 5, dimensions))
    count = int(rng.integers(1, 4))
    stages = []
    for number in range(count):
        choices = [(), along(*range(dimensions)), along(int(rng.integers(dimensions))), around(dimensions)]
        laws = [Law.constant(), Law.exponential(), Law.measured(rng.random(20))]
        pattern = rng.integers(0, 20, (int(rng.integers(1, 4)), int(np.prod(shape))))
        cost = Cost.mapped(pattern, laws[int(rng.integers(3))])
        gates = []
        for _ in range(int(rng.integers(0, 3))):
            origin = int(rng.integers(count))
            gates.append(Gate(origin, int(rng.integers(0 if origin < number else 1, 3))))
        offsets = choices[int(rng.integers(4))]
        stages.append(TileStage(cost, offsets, int(rng.integers(0, 50)), tuple(gates)))
    cycles, seed = int(rng.integers(1, 6)), int(rng.integers(100))
    return TiledSplitting(shape, cycles, tuple(stages), bool(rng.integers(2)), seed)


def link(rng: np.random.Generator) -> MachineModel:
    return MachineModel(
        workers=int(rng.integers(1, 6)),
        threads=int(rng.integers(1, 3)),
        overhead_ns=int(rng.choice([0, 3])),
        alpha_ns=int(rng.choice([0, 5])),
        ps_per_byte=int(rng.choice([0, 300])),
        hop_ns=int(rng.choice([0, 2])),
    )


@pytest.mark.parametrize("block", range(4))
def test_rules_and_stored_graphs_agree(block: int) -> None:
    for seed in range(100 * block, 100 * (block + 1)):
        rng = np.random.default_rng(seed)
        splitting, machine = random_splitting(rng), link(rng)
        graph = stored_graph(splitting)
        home = rng.integers(0, machine.workers, splitting.tiles).astype(np.int32)
        stored = replay_owner(graph, machine, graph.owners(home))
        by_rule = replay_tiles(splitting, machine, home)
        ends = stored.finish_ns.reshape(splitting.phases, -1)[:, :-1]
        assert ends.max(axis=1).tolist() == by_rule.phase_ns.tolist()
        assert stored.makespan_ns == by_rule.makespan_ns
        for name in ("busy_ns", "overhead_ns", "idle_ns", "received_bytes"):
            assert getattr(stored, name).tolist() == getattr(by_rule, name).tolist()
        assert stored.messages == by_rule.messages
        each = replace(machine, workers=splitting.tiles, threads=1)
        alone = replay_owner(graph, each, graph.owners(np.arange(splitting.tiles)))
        swept = sweep_tiles(splitting, each)
        ends = alone.finish_ns.reshape(splitting.phases, -1)[:, :-1]
        assert ends.max(axis=1).tolist() == swept.phase_ns.tolist()
        assert ends[-1].tolist() == swept.finish_ns.tolist()
        assert swept.work_ns == int(task_costs(splitting).sum())


def test_a_sweep_in_two_parts_is_the_sweep_in_one(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("breakstep.forecast.sweep.SHARED_TILES", 1)
    for seed in range(40):
        rng = np.random.default_rng(seed)
        splitting = random_splitting(rng)
        one, two = (sweep_tiles(splitting, MachineModel(splitting.tiles, hop_ns=3), jobs) for jobs in (1, 2))
        assert one.phase_ns.tolist() == two.phase_ns.tolist()
        assert one.finish_ns.tolist() == two.finish_ns.tolist()
        assert one.work_ns == two.work_ns
