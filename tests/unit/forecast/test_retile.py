"""Other tiles and other numbers of iterations: what must stay the same does."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from breakstep.errors import ForecastError
from breakstep.forecast.basis import basis_of
from breakstep.forecast.program import CostTables, Pattern, Program, Tiles
from breakstep.forecast.retile import mesh_shape, retiled, tile_shapes
from breakstep.forecast.unfold import unfold
from breakstep.mesh.halo import plan_halo
from breakstep.mesh.mesh import Mesh
from breakstep.mesh.tiling import Tiling
from tests.unit.forecast.recorded import Ring, hot
from tests.unit.forecast.test_lift import repeat


def tiling(zones: tuple[int, ...], tile: tuple[int, ...], edges: tuple[str, ...]) -> Tiling:
    """A tiling as runs have it."""
    return Tiling(Mesh(zones, tuple(1.0 * n for n in zones), tuple((edge, edge) for edge in edges)), tile)


def tiles_of(made: Tiling) -> Tiles:
    """The same as a program has it."""
    periodic = tuple(made.mesh.is_periodic(axis) for axis in range(3))
    origin, shape = ([getattr(tile, name) for tile in made.tiles] for name in ("origin", "shape"))
    return Tiles(np.array(origin), np.array(shape), (periodic[0], periodic[1], periodic[2]))


def pattern_of(made: Tiling, halo: tuple[int, int, int]) -> Pattern:
    """Who reads whom, from the plans by which runs put ghost zones together."""
    pairs = {(tile.number, tile.number) for tile in made.tiles}
    for tile in made.tiles:
        pairs |= {(tile.number, rim.neighbour) for rim in plan_halo(made, tile.number, halo, False).rims}
    consumer, producer = np.array(sorted(pairs)).T
    return Pattern(producer, consumer)


def program_on(made: Tiling, halo: tuple[int, int, int]) -> Program:
    """One pattern and random costs on a tiling."""
    few = basis_of([Ring(hot(2, 4)).profile()]).program
    count, random = len(made), np.random.default_rng(3)
    costs = CostTables({"s": random.random((2, count))}, *(random.random((2, count)) for _ in range(3)))
    return replace(few, tiles=tiles_of(made), patterns=(pattern_of(made, halo),), costs=costs)


@pytest.mark.parametrize("edges", [("periodic", "periodic"), ("outflow", "periodic"), ("outflow", "reflecting")])
@pytest.mark.parametrize("halo", [(2, 0, 0), (0, 1, 0), (1, 1, 0)])
@pytest.mark.parametrize("tile", [(4, 4), (8, 16), (12, 8), (6, 5)])
def test_neighbours_are_those_of_a_run_on_these_tiles(
    edges: tuple[str, ...], halo: tuple[int, int, int], tile: tuple[int, ...]
) -> None:
    program = program_on(tiling((24, 32), (8, 8), edges), halo)
    found, wanted = retiled(program, tile).patterns[0], pattern_of(tiling((24, 32), tile, edges), halo)
    assert found.key == (wanted.producer.astype(np.int64).tobytes(), wanted.consumer.astype(np.int64).tobytes())


def test_the_same_tiles_leave_everything_as_it_is() -> None:
    program = program_on(tiling((24, 32), (8, 8), ("periodic", "outflow")), (1, 1, 0))
    again = retiled(program, (8, 8))
    assert again.patterns[0].key == program.patterns[0].key
    for name in ("surface", "rest", "output"):
        assert np.allclose(getattr(again.costs, name), getattr(program.costs, name))
    assert np.allclose(again.costs.kernel["s"], program.costs.kernel["s"])


def test_whole_tiles_that_become_one_are_summed() -> None:
    program = program_on(tiling((16, 16), (8, 8), ("periodic", "periodic")), (1, 0, 0))
    merged = retiled(program, (16, 8)).costs.kernel["s"]
    single = program.costs.kernel["s"]
    assert np.allclose(merged, np.stack([single[:, 0] + single[:, 2], single[:, 1] + single[:, 3]], axis=1))


@pytest.mark.parametrize("tile", [(4, 4), (6, 5), (24, 32)])
def test_kernel_time_and_bytes_are_kept(tile: tuple[int, ...]) -> None:
    program = program_on(tiling((24, 32), (8, 8), ("periodic", "periodic")), (1, 1, 0))
    other = retiled(program, tile)
    assert np.allclose(other.costs.kernel["s"].sum(axis=1), program.costs.kernel["s"].sum(axis=1))
    assert np.allclose(other.costs.output.sum(axis=1), program.costs.output.sum(axis=1))


def test_finer_tiles_have_more_border() -> None:
    program = program_on(tiling((32, 32), (16, 16), ("periodic", "periodic")), (1, 1, 0))
    assert retiled(program, (8, 8)).costs.surface.sum() > program.costs.surface.sum()


def test_tiles_that_do_not_fit_and_axes_that_are_unknown_are_refused() -> None:
    program = program_on(tiling((32, 32), (16, 32), ("periodic", "periodic")), (1, 1, 0))
    with pytest.raises(ForecastError, match="do not fit"):
        retiled(program, (64, 8))
    with pytest.raises(ForecastError, match="expected 2 numbers"):
        retiled(program, (8,))
    with pytest.raises(ForecastError, match="one tile along y"):
        retiled(program, (16, 8))


def test_shapes_to_try_hold_the_recorded_one_and_stay_inside_the_mesh() -> None:
    tiles = tiles_of(tiling((96, 96), (24, 24), ("periodic", "periodic")))
    shapes = tile_shapes(tiles)
    assert (24, 24, 1) in shapes
    assert shapes == sorted(shapes, reverse=True)
    assert all(s <= m for shape in shapes for s, m in zip(shape, mesh_shape(tiles), strict=True))


@pytest.mark.parametrize("more", [1, 2])
@pytest.mark.parametrize(("executed", "emitted", "lag"), [(3, 3, 1), (2, 4, 0)])
def test_iterations_put_in_and_taken_out_leave_the_program_as_it_was(
    more: int, executed: int, emitted: int, lag: int
) -> None:
    program = basis_of([Ring(repeat(executed, emitted, lag), lags={"err": lag}).profile()]).program
    longer = program.with_iterations("err", more)
    assert len(longer.phases) == len(program.phases) + 2 * more
    assert all(source < number for number, phase in enumerate(longer.phases) for source, _ in phase.reads)
    assert longer.with_iterations("err", -more).phases == program.phases
    unfold(longer)  # refuses edges that go backwards


def test_a_copied_iteration_reads_the_one_before_it() -> None:
    program = basis_of([Ring(repeat(2, 2, 0), lags={"err": 0}).profile()]).program
    longer = program.with_iterations("err", 1)
    assert [[source for source, _ in phase.reads] for phase in longer.phases] == [[], *([n] for n in range(7))]


def test_there_is_always_one_iteration() -> None:
    program = basis_of([Ring(repeat(2, 2, 0), lags={"err": 0}).profile()]).program
    fewer = program.with_iterations("err", -5)
    assert [phase.stage for phase in fewer.phases] == ["head", "relax", "judge", "tail"]


def test_a_lag_brings_its_iterations_along() -> None:
    program = basis_of([Ring(repeat(3, 3, 0), lags={"err": 0}).profile()]).program
    assert len(program.with_lag("err", 2).phases) == len(program.phases) + 4
