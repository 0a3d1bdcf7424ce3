"""Placement: contiguous shares of equal cost, and a curve whose neighbours are neighbours."""

from __future__ import annotations

import itertools
from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from breakstep.engine.placement import PLACEMENTS, owners
from breakstep.engine.program import Program
from breakstep.errors import DeclarationError
from breakstep.graph.tasks import ANYWHERE
from breakstep.mesh.mesh import Edge, Mesh
from breakstep.partition import curve_order, hilbert_index, runs
from tests.toys import Toy

COSTS = st.lists(st.floats(0.01, 100.0), min_size=1, max_size=40)


def program_of(*grid: int) -> Program:
    """As many tiles along each axis, three zones each, with open edges."""
    problem = Toy((3,) * len(grid), repeats=False).problem()
    mesh = Mesh(tuple(3 * n for n in grid), (1.0,) * len(grid), ((Edge.OUTFLOW, Edge.OUTFLOW),) * len(grid))
    return Program(replace(problem, mesh=mesh), (3,) * len(grid))


@pytest.mark.parametrize("placement", [p for p in PLACEMENTS if p != "dask"])
@pytest.mark.parametrize("workers", [1, 2, 3, 7])
def test_tiles_are_shared_out_to_within_one(placement: str, workers: int) -> None:
    owned = owners(placement, program_of(5, 4), workers)
    counts = [owned.count(worker) for worker in range(workers)]
    assert sum(counts) == 20
    assert max(counts) - min(counts) <= 1


def test_blocks_are_contiguous_and_cyclic_is_not() -> None:
    program = program_of(6)
    assert owners("blocks", program, 3) == [0, 0, 1, 1, 2, 2]
    assert owners("cyclic", program, 3) == [0, 1, 2, 0, 1, 2]
    assert owners("dask", program, 3) == [ANYWHERE] * 6


def test_more_workers_than_tiles_leave_some_without() -> None:
    owned = owners("blocks", program_of(3), 5)
    assert len(set(owned)) == 3
    assert set(owned) <= set(range(5))


def test_an_unknown_placement_lists_the_choices() -> None:
    with pytest.raises(DeclarationError, match=r"must be one of blocks, curve, .*, dask, not 'random'"):
        owners("random", program_of(3), 2)


def test_balanced_cuts_where_the_costs_say() -> None:
    """One tile as dear as the seven others together has a worker of its own."""
    assert owners("balanced", program_of(8), 2, [7.0] + [1.0] * 7) == [0] + [1] * 7
    assert owners("balanced", program_of(8), 2) == [0] * 4 + [1] * 4
    assert owners("curve", program_of(8), 2, [7.0] + [1.0] * 7) == [0] * 4 + [1] * 4


@given(COSTS, st.integers(1, 9))
def test_runs_are_contiguous_and_near_an_equal_share(costs: list[float], workers: int) -> None:
    """No worker has more than its share and the two tiles at its ends."""
    owned = runs(range(len(costs)), costs, workers)
    assert owned == sorted(owned)
    for worker in set(owned):
        load = sum(cost for cost, owner in zip(costs, owned, strict=True) if owner == worker)
        # Half of each end tile can lie outside the share; 1e-9 for the rounding of sums of up to 40 numbers
        assert load <= sum(costs) / workers + max(costs) + 1e-9 * sum(costs)


@pytest.mark.parametrize(("dimensions", "bits"), [(1, 3), (2, 1), (2, 3), (3, 2)])
def test_the_curve_visits_every_place_once_and_steps_to_a_neighbour(dimensions: int, bits: int) -> None:
    """What makes it a Hilbert curve (Skilling 2004): a bijection whose consecutive places touch."""
    places = list(itertools.product(range(2**bits), repeat=dimensions))
    order = sorted(places, key=lambda place: hilbert_index(list(place), bits))
    assert sorted(hilbert_index(list(place), bits) for place in places) == list(range(len(places)))
    for here, there in itertools.pairwise(order):
        assert sum(abs(a - b) for a, b in zip(here, there, strict=True)) == 1


def test_the_curve_orders_grids_that_are_no_power_of_two() -> None:
    order = curve_order([tile.place for tile in program_of(5, 3).tiling.tiles])
    assert sorted(order) == list(range(15))


def test_patches_have_fewer_seams_than_blocks() -> None:
    """Sixteen by sixteen tiles on four workers: quarters touch along less than strips."""
    program = program_of(16, 16)

    def seams(placement: str) -> int:
        owned = owners(placement, program, 4)
        found = 0
        for tile in program.tiling.tiles:
            for offset in ((1, 0, 0), (0, 1, 0)):
                neighbour = program.tiling.neighbour(tile.number, offset)
                found += neighbour is not None and owned[neighbour] != owned[tile.number]
        return found

    assert seams("blocks") == 3 * 16  # three cuts between four strips
    assert seams("curve") == 2 * 16  # two cuts between four quarters
    assert seams("cyclic") > 3 * 16
