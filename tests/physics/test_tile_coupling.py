"""Tiles coupled to neighbours, with and without barriers: laws of growth and of waiting, and what hides latency.

Random cases: fixed seeds, within three standard errors, which come from independent copies or from batches. A unit of
time is 10^6 ns, so that whole nanoseconds round by 10^-6.
"""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from numpy.typing import NDArray

from breakstep.forecast.bounds import heads
from breakstep.forecast.dynamic import replay_owner
from breakstep.forecast.fixed import Schedule, replay_fixed
from breakstep.forecast.free import replay_free
from breakstep.forecast.graph import build_graph
from breakstep.forecast.implicit import replay_tiles, stored_graph
from breakstep.forecast.laws import Cost, Law
from breakstep.forecast.model import MachineModel
from breakstep.forecast.sweep import sweep_tiles
from breakstep.forecast.tiles import Offset, TiledSplitting, TileStage, along

pytestmark = pytest.mark.physics

UNIT = 1_000_000
LEFT: tuple[Offset, ...] = ((-1, 0, 0),)
ONE = MachineModel(1)


def harmonic(count: int) -> float:
    return float(sum(Fraction(1, k) for k in range(1, count + 1)))


def agrees(samples: NDArray[np.float64], expected: float, allowance: float = 0.0) -> None:
    """The mean is within three standard errors; ``allowance`` is for a known error of the expected value."""
    error = samples.std(ddof=1) / math.sqrt(len(samples))
    assert error < 0.01 * expected, "too few samples to say anything"
    assert abs(samples.mean() - expected) <= 3 * error + allowance, (samples.mean(), error, expected)


def ring(
    tiles: int, steps: int, offsets: tuple[Offset, ...], law: Law, slack: int = 1, seed: int = 1
) -> TiledSplitting:
    return TiledSplitting((tiles,), steps, (TileStage(Cost.even(tiles, UNIT, law), offsets, slack=slack),), seed=seed)


def rates(splitting: TiledSplitting, batches: int = 40) -> NDArray[np.float64]:
    """Time per step in batches, the first of which is left out."""
    ends = sweep_tiles(splitting, ONE).phase_ns / UNIT
    marks = ends[np.linspace(0, len(ends) - 1, batches + 1).astype(np.int64)]
    return (np.diff(marks) / ((len(ends) - 1) / batches))[1:]


@pytest.mark.parametrize("workers", [2, 4, 16, 64, 256, 1024])
def test_lockstep_costs_the_slowest(workers: int) -> None:
    """The longest of P exponential times is H_P on average, of P uniform ones P / (P + 1) of the range (textbook)."""
    steps = max(2000, 400_000 // workers)
    for law, mean in ((Law.exponential(), harmonic(workers)), (Law.of(lambda u: u), workers / (workers + 1))):
        ends = sweep_tiles(ring(workers, steps, LEFT, law).lockstep(), ONE).phase_ns / UNIT
        agrees(np.diff(ends, prepend=0), mean)


@pytest.mark.parametrize("tiles", [2, 3, 4, 8, 16, 64])
def test_ring_without_barriers(tiles: int) -> None:
    """Own tile and one neighbour: 2 - 1/P a step.

    An exclusion process on a ring, whose stationary law is uniform (F. Spitzer, Adv. Math. 5 (1970) 246, from memory).
    """
    agrees(rates(ring(tiles, 2_000_000 // tiles, LEFT, Law.exponential())), 2 - 1 / tiles)


@pytest.mark.parametrize(("tiles", "slack"), [(4, 2), (8, 3), (16, 2)])
def test_ring_with_slack(tiles: int, slack: int) -> None:
    """The neighbour may lag s steps: 1 + 1/s - 1/(sP)."""
    expected = 1 + 1 / slack - 1 / (slack * tiles)
    agrees(rates(ring(tiles, 1_500_000 // tiles, LEFT, Law.exponential(), slack)), expected)


def test_ring_of_unlike_tiles() -> None:
    """Means 1, 1, 1, 3: 261/82 a step, a closed queueing network (Gordon and Newell 1967, Buzen 1973, from memory)."""
    cost = Cost.mapped(UNIT * np.array([[1, 1, 1, 3]]), Law.exponential())
    agrees(rates(TiledSplitting((4,), 400_000, (TileStage(cost, LEFT),))), 261 / 82)


@pytest.mark.parametrize(
    ("tiles", "step"),
    [(3, Fraction(11, 6)), (4, Fraction(47, 24)), (5, Fraction(6569, 3210)), (6, Fraction(5489084, 2612745))],
)
def test_both_neighbours(tiles: int, step: Fraction) -> None:
    """Exact finite Markov chains, computed apart from this code; three tiles are in lockstep, H_3."""
    agrees(rates(ring(tiles, 2_000_000 // tiles, along(0), Law.exponential())), float(step))


def test_large_ring_with_both_neighbours() -> None:
    """1 / 0.4194, the growth velocity of the restricted solid-on-solid model in one dimension.

    J. M. Kim and J. M. Kosterlitz, Phys. Rev. Lett. 62 (1989) 2289; J. Krug and P. Meakin, J. Phys. A 23 (1990) L987
    (from memory). A ring of P tiles is faster by about 1.7 / P, as P = 4, 5, 6 above show, and 0.4194 is rounded.
    """
    splitting = ring(2048, 12_000, along(0), Law.exponential())
    agrees(rates(splitting, 24)[4:], 1 / 0.4194, 1.7 / 2048 + 0.0003)


def test_tori() -> None:
    """Five-point coupling: 2 x 3 and 3 x 3 exact chains; the large limit 1 / 0.3127, 0.5 % less at 64 x 64."""
    for shape, step in (((2, 3), 4853 / 2148), ((3, 3), 2.5366483)):
        tiles = shape[0] * shape[1]
        cost = Cost.even(tiles, UNIT, Law.exponential())
        agrees(rates(TiledSplitting(shape, 200_000, (TileStage(cost, along(0, 1)),))), step)
    cost = Cost.even(64 * 64, UNIT, Law.exponential())
    found = rates(TiledSplitting((64, 64), 3000, (TileStage(cost, along(0, 1)),)))
    agrees(found, 1 / 0.3127, 0.01 / 0.3127)


def grids(side: int, copies: int, seed: int) -> NDArray[np.float64]:
    """Longest path through each of ``copies`` side x side grids of exponential times."""
    rng = np.random.default_rng(seed)
    durations = rng.exponential(UNIT, (copies, side, side)).astype(np.int64)
    number = np.arange(copies * side * side).reshape(copies, side, side)
    producer = np.concatenate([number[:, :-1, :].ravel(), number[:, :, :-1].ravel()])
    consumer = np.concatenate([number[:, 1:, :].ravel(), number[:, :, 1:].ravel()])
    graph = build_graph(durations.ravel(), producer, consumer)
    ends = heads(graph, ONE) + graph.duration_ns
    return ends.reshape(copies, side, side)[:, -1, -1] / UNIT


@pytest.mark.parametrize(("side", "mean"), [(2, 7 / 2), (3, 313 / 48), (4, 1367807 / 139968), (8, 23.734940)])
def test_last_passage(side: int, mean: float) -> None:
    """The largest eigenvalue of a complex Wishart matrix (K. Johansson, Comm. Math. Phys. 209 (2000) 437, from memory).

    Means computed apart from this code, by determinants and by recursion over order ideals.
    """
    agrees(grids(side, 20_000 // side, side), mean)


def test_last_passage_through_a_large_grid() -> None:
    """(sqrt M + sqrt N)^2 less 1.7711 N^(1/3) 2^(4/3) for M = N: 379.29 at 100 x 100 (Johansson 2000)."""
    expected = 400 - 1.7711 * 100 ** (1 / 3) * 2 ** (4 / 3)
    agrees(grids(100, 60, 100), expected, 0.0003 * expected)  # terms of higher order: 0.03 % here


def test_flat_start() -> None:
    """Mean end of step n on a one-sided ring: 1, 5/2, 25/6.

    W. FitzGerald and J. Warren, Probab. Theory Relat. Fields 178 (2020) 121. Tiles more than n apart are independent.
    """
    for steps, mean in ((1, 1.0), (2, 5 / 2), (3, 25 / 6)):
        finish = sweep_tiles(ring(200_000, steps, LEFT, Law.exponential()), ONE, jobs=1).finish_ns / UNIT
        agrees(finish.reshape(400, -1).mean(axis=1), mean)


def test_exact_means_of_small_graphs() -> None:
    """Recursions over order ideals, computed apart: ring of 4, 3 steps, 6; lockstep 25/4; 3 x 3 on 2 workers 423/64."""
    splittings = [ring(4, 3, along(0), Law.exponential(), seed=seed) for seed in range(3000)]
    agrees(np.array([sweep_tiles(one, ONE).makespan_ns for one in splittings]) / UNIT, 6)
    agrees(np.array([sweep_tiles(one.lockstep(), ONE).makespan_ns for one in splittings]) / UNIT, 25 / 4)
    rng = np.random.default_rng(5)
    edges = [(i, i + 1) for i in range(9) if i % 3 < 2] + [(i, i + 3) for i in range(6)]
    base = build_graph([0] * 9, [a for a, _ in edges], [b for _, b in edges])
    times = rng.exponential(UNIT, (3000, 9)).astype(np.int64)
    found = [replay_free(base.with_durations(row), MachineModel(2)).makespan_ns for row in times]
    agrees(np.array(found) / UNIT, 423 / 64)


@pytest.mark.parametrize(("tasks", "workers"), [(64, 4), (64, 16), (256, 16), (1024, 64)])
def test_bag_of_tasks(tasks: int, workers: int) -> None:
    """Exponential times on one queue are memoryless: N/P - 1 + H_P."""
    rng = np.random.default_rng(workers)
    times = rng.exponential(UNIT, (2000, tasks)).astype(np.int64)
    base = build_graph(times[0], [], [])
    found = [replay_free(base.with_durations(row), MachineModel(workers)).makespan_ns for row in times]
    agrees(np.array(found) / UNIT, tasks / workers - 1 + harmonic(workers))


@pytest.mark.parametrize("two_sided", [False, True])
def test_moving_hot_tile(two_sided: bool) -> None:
    """One hot tile of time h moves d tiles a step: 1 + (h - 1) / k* a step, in lockstep h.

    k* is the least k >= 1 with d k = a (mod P) for an a in 0..k, or -k..k: the largest mean of a cycle. A hot tile
    that stays, d = 0, costs h either way: tasks do not cure it.
    """
    tiles, hot = 12, 7
    for drift in range(tiles):
        reach = next(
            k
            for k in range(1, tiles + 1)
            if any((drift * k - a) % tiles == 0 for a in range(-k if two_sided else 0, k + 1))
        )
        pattern = np.ones((tiles, tiles), dtype=np.int64)
        pattern[np.arange(tiles), drift * np.arange(tiles) % tiles] = hot
        offsets = along(0) if two_sided else LEFT
        splitting = TiledSplitting((tiles,), 40 * tiles * reach, (TileStage(Cost.mapped(pattern), offsets),))
        ends = sweep_tiles(splitting, ONE).phase_ns
        period = tiles * reach
        assert ends[-1] - ends[-1 - period] == period * (1 + Fraction(hot - 1, reach))
        lockstep = sweep_tiles(splitting.lockstep(), ONE).phase_ns
        assert np.all(np.diff(lockstep) == hot)


@pytest.mark.parametrize(("each", "fixed", "dynamic"), [(1, 52, 52), (2, 64, 52), (4, 64, 52), (8, 96, 96)])
def test_latency_hidden_behind_other_tiles(each: int, fixed: int, dynamic: int) -> None:
    """k tiles a worker in a row, those at its rim first, in a fixed order: max(k (t + o), 2 (t + o) + c) a step.

    With one tile t + o + c. When the worker takes whichever rim tile has its halo first, the two change places every
    step: max(k (t + o), t + o + c), the largest mean of a cycle of tasks and transfers. Derived by hand.
    """
    time, overhead, transfer, workers, steps = 10, 2, 40, 4, 60
    tiles, own = each * workers, time + overhead
    splitting = TiledSplitting((tiles,), steps, (TileStage(Cost.even(tiles, time), along(0)),))
    graph = stored_graph(splitting)
    place = np.arange(tiles + 1) % each
    inner = (place != 0) & (place != each - 1)
    rank = (2 * np.arange(steps)[:, np.newaxis] + inner).ravel().astype(np.int32)
    machine = MachineModel(workers, overhead_ns=overhead, alpha_ns=transfer)
    owner = graph.owners(np.arange(tiles) // each)
    in_order = Schedule(owner, np.argsort(rank, kind="stable").astype(np.int32))
    assert fixed == (max(each * own, 2 * own + transfer) if each > 1 else own + transfer)
    assert dynamic == max(each * own, own + transfer)
    for found, step in (
        (replay_fixed(graph, machine, in_order), fixed),
        (replay_owner(graph, machine, owner, rank), dynamic),
    ):
        ends = found.finish_ns.reshape(steps, -1)[:, :-1].max(axis=1)
        assert ends[-1] - ends[-13] == 12 * step


@pytest.mark.parametrize("slack", [1, 2, 3, 5])
def test_latency_hidden_by_slack(slack: int) -> None:
    """One-sided ring, the neighbour may lag s steps: max(t + o, (t + o + c) / s) a step."""
    stage = TileStage(Cost.even(8, 10), LEFT, slack=slack)
    ends = sweep_tiles(TiledSplitting((8,), 600, (stage,)), MachineModel(8, overhead_ns=2, alpha_ns=40)).phase_ns
    assert Fraction(int(ends[-1] - ends[-1 - 30 * slack]), 30 * slack) == max(12, Fraction(52, slack))


def test_shift_and_scale() -> None:
    """Where all paths have n tasks, T(m + s X) = n m + s T(X), sample by sample."""
    splitting = TiledSplitting((5, 4), 30, (TileStage(Cost.even(20, 0), along(0, 1)),))
    graph = stored_graph(splitting)
    owner = graph.owners(np.arange(20))
    rng = np.random.default_rng(8)
    steps = graph.on_worker
    for shift, scale in ((0, 3), (1000, 1), (77, 12)):
        times = np.where(steps, rng.integers(0, 1000, graph.tasks), 0)
        plain = replay_owner(graph.with_durations(times), MachineModel(20), owner).makespan_ns
        changed = np.where(steps, shift + scale * times, 0)
        found = replay_owner(graph.with_durations(changed), MachineModel(20), owner).makespan_ns
        assert found == 30 * shift + scale * plain


def test_uncoupled_tiles_that_share_a_worker() -> None:
    """Nothing to wait for: the worker is never idle, whatever the order."""
    splitting = TiledSplitting((6,), 50, (TileStage(Cost.even(6, UNIT, Law.exponential())),))
    found = replay_tiles(splitting, MachineModel(2), np.arange(6) % 2)
    assert found.idle_ns.min() == 0
    assert found.makespan_ns == found.busy_ns.max()
