"""Programs: initial states, journeys, verdicts that stand, and the small copy that warms up."""

from __future__ import annotations

import pickle
from collections.abc import Mapping
from dataclasses import replace

import numpy as np
import pytest

from breakstep.engine.program import Program
from breakstep.engine.warm import is_ours, small_copy, warm_up
from breakstep.errors import KernelError
from breakstep.mesh.fields import Field
from breakstep.mesh.mesh import Mesh
from breakstep.mesh.tiling import Tile
from breakstep.scenario.load import load_scenario
from breakstep.steps.problem import Problem
from breakstep.steps.reduction import Combine, Reduction
from breakstep.steps.splitting import Repeat, lie
from breakstep.steps.step import Array, Read, Step
from tests import toys
from tests.toys import Toy, dt_reduction, faulty_problem


def only_u(tile: Tile, mesh: Mesh) -> Mapping[str, Array]:
    """An initial state without ``w``."""
    return {"u": np.ones((1, *tile.shape))}


def bad_state(tile: Tile, mesh: Mesh) -> Mapping[str, Array]:
    """A function with a mistake in it."""
    return {"u": np.ones(list(tile.shape)[7])}


def scratch_problem(scratch: bool, initial: object = only_u) -> Problem:
    """``w`` is scratch, made from ``u`` before it is read; or state, and then the initial state lacks it."""
    make = Step("make", toys.smooth, (Read("u", (1, 0, 0)),), ("w",))
    use = Step("use", toys.smooth, (Read("w", (1, 0, 0)),), ("u",))
    fields = (Field("u", ("u",)), Field("w", ("w",), scratch=scratch), Field("t", ("t",), scratch=True, per_tile=True))
    return Problem("p", "t", Toy((12,)).problem().mesh, fields, lie([make, use]), initial, 1)  # type: ignore[arg-type]


def test_scratch_fields_need_no_initial_state() -> None:
    program = Program(scratch_problem(scratch=True), (3,))
    assert program.state_fields == ("u",)
    assert {name: array.shape for name, array in program.initial(1).items()} == {"u": (1, 3, 1, 1), "t": (1, 1, 1, 1)}


def nothing(tile: object, mesh: object) -> None:
    """A function that forgot to return."""


def test_an_initial_state_that_is_none_is_refused() -> None:
    with pytest.raises(
        KernelError, match="the initial state of tile 1: expected a mapping of field to array, got None"
    ):
        Program(scratch_problem(scratch=True, initial=nothing), (3,)).initial(1)


def test_an_incomplete_initial_state_is_refused() -> None:
    with pytest.raises(KernelError, match="the initial state of tile 1: expected new arrays for t, u, w, got t, u"):
        Program(scratch_problem(scratch=False), (3,)).initial(1)


def test_scratch_that_is_read_before_it_is_made_needs_an_initial_state() -> None:
    problem = scratch_problem(scratch=True)
    backward = replace(problem, splitting=lie(list(reversed(problem.splitting.orders[0]))))
    with pytest.raises(KernelError, match="expected new arrays for t, u, w, got t, u"):
        Program(backward, (3,)).initial(0)
    measured = replace(
        problem, splitting=lie(problem.splitting.orders[0], [replace(dt_reduction(), reads=(Read("w"),))])
    )
    with pytest.raises(KernelError, match="expected new arrays for t, u, w, got t, u"):
        Program(measured, (3,)).initial(0)


def test_a_faulty_initial_state_says_which_tile() -> None:
    with pytest.raises(KernelError, match="the initial state of tile 2: the user's function raised IndexError"):
        Program(scratch_problem(scratch=True, initial=bad_state), (3,)).initial(2)


def test_initial_states_are_protected() -> None:
    assert all(not array.flags.writeable for array in Program(Toy((12,)).problem(), (3,)).initial(0).values())


def test_programs_travel_small_and_arrive_whole() -> None:
    program = Program(Toy((48, 48)).problem(), (4, 4), fuse=False)
    copy = pickle.loads(pickle.dumps(program))
    assert len(pickle.dumps(program)) < 4000  # the plans of 144 tiles would take far more
    assert copy.template == program.template
    assert copy.tiling == program.tiling
    assert copy.problem == program.problem


def test_a_rim_is_found_by_its_offset() -> None:
    program = Program(Toy((12,)).problem(), (3,))
    rim = program.rim(1, Read("u", (1, 0, 0)), (-1, 0, 0))
    assert (rim.neighbour, rim.source[0]) == (0, slice(2, 3))
    assert program.rim(1, Read("u", (1, 0, 0)), (-1, 0, 0)) is rim
    assert program.reduction("dt").name == "dt"


def test_a_verdict_that_said_stop_stands() -> None:
    program = Program(Toy((12,), residual_lag=1).problem(), (3,))
    (stage,) = (s for s in program.template.stages if s.repeat)
    residual = program.reduction("residual")
    small, large = np.array([0.0]), np.array([9.0])
    assert program.finish(stage.index, residual, large, None, 1).tolist() == [[9.0]]
    assert program.finish(stage.index, residual, small, large, 1).tolist() == [[0.0]]
    assert program.finish(stage.index, residual, large, small, 1).tolist() == [[0.0]]
    assert program.stop(stage.index, small)
    assert not program.stop(stage.index, large)


def test_cycle_level_results_always_move_on() -> None:
    program = Program(Toy((12,)).problem(), (3,))
    assert program.template.start is not None
    rows = program.finish(program.template.start.index, program.reduction("dt"), np.array([1.0]), np.zeros(2), 1)
    assert rows.tolist() == [[0.05, 0.0]]


def test_the_small_copy_runs_every_order_on_one_tile() -> None:
    program = Program(Toy((48, 48), two_orders=True, cycles=90).problem(), (12, 12))
    small = small_copy(program)
    assert small.problem.mesh.shape == (12, 12)  # tiles of a user, which these kernels are
    assert small.problem.cycles == 2
    assert len(small.tiling) == 1
    assert warm_up(program) == ""


def test_wide_halos_fit_the_small_copy() -> None:
    step = Step("wide", lambda arrays, call: {"u": arrays["u"][:, 7:-7]}, (Read("u", (7, 0, 0)),), ("u",))
    program = Program(replace(Toy((28,)).problem(), splitting=lie([step])), (14,))
    assert small_copy(program).problem.mesh.shape == (14,)
    assert warm_up(program) == ""


def test_an_error_while_warming_up_is_told_and_no_reason_to_stop() -> None:
    assert "ZeroDivisionError" in warm_up(Program(faulty_problem("divides", tile=0, cycle=0), (3,)))


def test_reductions_with_a_name_of_their_own_are_found() -> None:
    total = Reduction("total", toys.rate, (Read("u"),), Combine.SUM, toys.as_it_is)
    problem = Toy((12,)).problem()
    program = Program(replace(problem, splitting=lie(problem.splitting.orders[0], [dt_reduction(), total])), (3,))
    assert program.reduction("total") is total


def test_a_user_s_kernels_warm_up_on_tiles_of_the_problem_s_shape() -> None:
    """An old routine may know its dimensions since it was compiled, and writes past a smaller block."""
    program = Program(Toy((36,)).problem(), (9,))
    small = small_copy(program)
    assert not is_ours(program)
    assert [tile.shape for tile in small.tiling.tiles] == [(9, 1, 1)]
    repeats = [item for item in small.problem.splitting.items() if isinstance(item, Repeat)]
    assert all(repeat.stop(np.array([np.nan])) for repeat in repeats)
    assert repeats


def test_built_in_kernels_warm_up_on_a_few_zones() -> None:
    program = Program(load_scenario("quiet_gas").problem(), load_scenario("quiet_gas").tile)
    assert is_ours(program)
    assert max(small_copy(program).problem.mesh.shape) == 4
