"""Sweeps, wavefronts and pipelines with fixed times: published counts and formulas, met exactly."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from breakstep.forecast.bounds import lower_bounds, tail_ranks
from breakstep.forecast.dynamic import replay_owner
from breakstep.forecast.free import replay_free
from breakstep.forecast.graph import BARRIER, STEP, ReplayGraph, build_graph
from breakstep.forecast.model import MachineModel

pytestmark = pytest.mark.physics

Node = tuple[int, ...]


class Sketch:
    """A graph put together node by node, in program order."""

    def __init__(self) -> None:
        self.number: dict[Node, int] = {}
        self.times: list[int] = []
        self.owners: list[int] = []
        self.edges: list[tuple[int, int, int]] = []
        self.kinds: list[int] = []

    def add(self, node: Node, time: int, inputs: list[Node], owner: int = 0, kind: int = STEP) -> None:
        self.number[node] = len(self.times)
        self.times.append(time)
        self.owners.append(owner)
        self.kinds.append(kind)
        for one in inputs:
            if one in self.number:
                control = kind == BARRIER or self.kinds[self.number[one]] == BARRIER
                self.edges.append((self.number[one], self.number[node], int(control)))

    @property
    def graph(self) -> ReplayGraph:
        return build_graph(
            self.times,
            [edge[0] for edge in self.edges],
            [edge[1] for edge in self.edges],
            kind=np.array(self.kinds, dtype=np.int8),
            edge_kind=np.array([edge[2] for edge in self.edges], dtype=np.int8),
            edge_kinds=("data", "barrier:all"),
        )

    @property
    def owner(self) -> np.ndarray:
        return np.array(self.owners, dtype=np.int32)


def wavefront(side: int) -> Sketch:
    """side x side unit cells, each after the ones above and to the left; barriers behind the antidiagonals."""
    sketch = Sketch()
    for front in range(2 * side - 1):
        cells = [(i, front - i) for i in range(side) if 0 <= front - i < side]
        for i, j in cells:
            sketch.add((i, j), 1, [(i - 1, j), (i, j - 1), (front - 1, -1, -1)])
        sketch.add((front, -1, -1), 0, list(cells), kind=BARRIER)
    return sketch


def test_wavefront_on_few_workers() -> None:
    """max(M + N - 1, ceil(MN / P) + P - 1), a bound by counting that the longest way first attains."""
    graph = wavefront(8).graph
    tasked, lockstep = [], []
    free = graph.without([1])
    for workers in range(1, 9):
        machine = MachineModel(workers)
        tasked.append(replay_free(graph, machine, tail_ranks(graph, machine, kinds=free), free).makespan_ns)
        lockstep.append(replay_free(graph, machine).makespan_ns)
    assert tasked == [max(15, -(-64 // workers) + workers - 1) for workers in range(1, 9)]
    assert tasked == [64, 33, 24, 19, 17, 16, 16, 15]
    assert lockstep == [64, 36, 27, 22, 20, 18, 16, 15]  # the sum of ceil(length / P) over antidiagonals


@pytest.mark.parametrize(
    ("columns", "rows", "units", "transfer", "makespan"), [(4, 4, 10, 0, 48), (4, 4, 10, 2, 60), (8, 8, 48, 2, 214)]
)
def test_sweep_from_one_corner(columns: int, rows: int, units: int, transfer: int, makespan: int) -> None:
    """t (K + Px + Py - 2) + c (Px + Py - 2), the pipeline count of Koch, Baker and Alcouffe (from memory)."""
    sketch = Sketch()
    for unit, i, j in itertools.product(range(units), range(columns), range(rows)):
        sketch.add((unit, i, j), 3, [(unit, i - 1, j), (unit, i, j - 1)], owner=i * rows + j)
    machine = MachineModel(columns * rows, alpha_ns=transfer)
    assert replay_owner(sketch.graph, machine, sketch.owner).makespan_ns == makespan
    assert makespan == 3 * (units + columns + rows - 2) + transfer * (columns + rows - 2)


@pytest.mark.parametrize(
    ("columns", "rows", "units", "stages"), [(2, 2, 1, 4), (4, 4, 1, 8), (4, 4, 3, 16), (6, 4, 2, 14), (8, 8, 2, 20)]
)
def test_sweeps_from_all_corners_at_once(columns: int, rows: int, units: int, stages: int) -> None:
    """4A + 2 (ceil(Px/2) - 1 + ceil(Py/2) - 1) stages with the longest way first.

    M. P. Adams et al., J. Comput. Phys. 407 (2020) 109234: the least count is always reached; formula from memory.
    """
    sketch = Sketch()
    for right, down, unit in itertools.product((1, -1), (1, -1), range(units)):
        for i, j in itertools.product(range(columns)[::right], range(rows)[::down]):
            inputs = [(right, down, unit, i - right, j), (right, down, unit, i, j - down)]
            sketch.add((right, down, unit, i, j), 1, inputs, owner=i * rows + j)
    graph, machine = sketch.graph, MachineModel(columns * rows)
    found = replay_owner(graph, machine, sketch.owner, tail_ranks(graph, machine, sketch.owner)).makespan_ns
    assert found == stages == 4 * units + 2 * (-(-columns // 2) + -(-rows // 2) - 2)


def line_solve(groups: int, ranks: int, forward: int, backward: int) -> Sketch:
    """A forward sweep of all groups through all ranks, and a backward sweep; a barrier between them."""
    sketch = Sketch()
    for group, rank in itertools.product(range(groups), range(ranks)):
        sketch.add((0, group, rank), forward, [(0, group, rank - 1)], owner=rank)
    sketch.add((9,), 0, [(0, group, rank) for group in range(groups) for rank in range(ranks)], kind=BARRIER)
    for group, rank in itertools.product(range(groups), range(ranks)[::-1]):
        sketch.add((1, group, rank), backward, [(1, group, rank + 1), (0, group, rank), (9,)], owner=rank)
    return sketch


@pytest.mark.parametrize(
    ("ranks", "groups", "forward", "backward", "makespan"), [(4, 6, 2, 1, 27), (8, 20, 3, 2, 135), (5, 1, 7, 4, 55)]
)
def test_a_barrier_that_costs_nothing(ranks: int, groups: int, forward: int, backward: int, makespan: int) -> None:
    """(G + P - 1)(f + b) with and without the barrier between the sweeps, whichever sweep goes first."""
    sketch = line_solve(groups, ranks, forward, backward)
    graph, machine = sketch.graph, MachineModel(ranks)
    later = np.arange(graph.tasks, dtype=np.int32)
    assert makespan == (groups + ranks - 1) * (forward + backward)
    for rank in (None, -later):
        for kinds in (graph.without([]), graph.without([1])):
            assert replay_owner(graph, machine, sketch.owner, rank, kinds).makespan_ns == makespan


def test_grain_of_a_pipelined_line_solve() -> None:
    """T(G) = (G + P - 1)(wL/G + a) is least at G* = sqrt((P - 1) wL / a) = 26.77, T* = (sqrt(wL) + sqrt(a (P - 1)))^2.

    Common practice (pipelined Thomas solver). A unit is 10^6 ns, so rounding a task's time moves T by less than 1e-4.
    """
    ranks, lines, latency, unit = 8, 1024, 10, 1_000_000
    found = {}
    for groups in range(20, 36):
        sketch = Sketch()
        for group, rank in itertools.product(range(groups), range(ranks)):
            sketch.add((group, rank), round(unit * (lines / groups + latency)), [(group, rank - 1)], owner=rank)
        found[groups] = replay_owner(sketch.graph, MachineModel(ranks), sketch.owner).makespan_ns / unit
        assert found[groups] == pytest.approx((groups + ranks - 1) * (lines / groups + latency), abs=1e-4)
    assert min(found, key=found.__getitem__) == 27
    assert found[27] == pytest.approx(1629.48, abs=0.005)  # two decimals were kept
    assert found[27] + 0.005 >= 1629.46  # the continuous optimum lies below


def test_tiled_cholesky_critical_path() -> None:
    """Kernels of weight 1, 3, 3, 6: t (t+1)(t+2) / 6 tasks, work t^3, critical path 9t - 10 (from memory)."""
    for tiles, path in ((2, 8), (3, 17), (4, 26), (8, 62)):
        sketch = Sketch()
        for k in range(tiles):
            sketch.add((k, k, k), 1, [(k, k, k - 1)])
            for i in range(k + 1, tiles):
                sketch.add((i, k, k), 3, [(k, k, k), (i, k, k - 1)])
            for i, j in itertools.product(range(k + 1, tiles), repeat=2):
                if i >= j:
                    inputs = {(i, k, k), (j, k, k), (i, j, k - 1)}
                    sketch.add((i, j, k), 3 if i == j else 6, sorted(inputs))
        graph = sketch.graph
        assert graph.tasks == tiles * (tiles + 1) * (tiles + 2) // 6
        assert int(graph.duration_ns.sum()) == tiles**3
        assert lower_bounds(graph, MachineModel(1)).path_ns == path


def test_butterfly() -> None:
    """n (log2 n + 1) unit tasks on P workers that divide n: n (log2 n + 1) / P (from memory)."""
    sketch = Sketch()
    for level, lane in itertools.product(range(5), range(16)):
        sketch.add((level, lane), 1, sorted({(level - 1, lane), (level - 1, lane ^ (1 << max(level - 1, 0)))}))
    assert [replay_free(sketch.graph, MachineModel(workers)).makespan_ns for workers in (2, 4, 16)] == [40, 20, 5]
