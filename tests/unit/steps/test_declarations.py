"""Declarations that contradict themselves are refused, each with a sentence that names the culprit."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from breakstep.errors import DeclarationError, TilingError
from breakstep.mesh.fields import Field
from breakstep.mesh.mesh import Edge, Mesh
from breakstep.steps.problem import Problem
from breakstep.steps.reduction import Combine, Reduction
from breakstep.steps.splitting import Repeat, Splitting, lie
from breakstep.steps.step import Call, Read, Step
from tests import toys
from tests.toys import Toy, dt_reduction

SMOOTH = Step("smooth", toys.smooth, (Read("u", (1, 0, 0)),), ("u",))
RESIDUAL = Reduction("residual", toys.largest_change, (Read("change"),), Combine.MAX, toys.as_it_is)
SOLVE = Repeat("solve", (Step("relax", toys.relax, (Read("v", (1, 0, 0)),), ("v",)),), RESIDUAL, toys.is_small, 9)


@pytest.mark.parametrize(
    ("declare", "sentence"),
    [
        (lambda: replace(SMOOTH, name="not a name"), "name of a step must be an identifier, not 'not a name'"),
        (lambda: replace(SMOOTH, writes=()), "step 'smooth' declares no writes"),
        (lambda: replace(SMOOTH, writes=("u", "u")), "step 'smooth' declares the same write twice"),
        (lambda: replace(SMOOTH, reads=(Read("u"), Read("u", (1, 0, 0)))), "its read of field 'u' twice"),
        (lambda: replace(SMOOTH, reads=(Read("u", (1, 0)),)), r"halo \(1, 0\); expected three whole numbers"),  # type: ignore[arg-type]
        (lambda: replace(SMOOTH, reads=(Read("u", (-1, 0, 0)),)), "expected three whole numbers, 0 or more"),
        (lambda: replace(SMOOTH, reads=(Read("u", (1.0, 0, 0)),)), "expected three whole numbers, 0 or more"),  # type: ignore[arg-type]
        (lambda: replace(SMOOTH, reads=(Read("u", 1),)), "halo 1; expected three whole numbers"),  # type: ignore[arg-type]
        (lambda: replace(RESIDUAL, combine="mean"), "combines by one of min, max, sum, not 'mean'"),  # type: ignore[arg-type]
        (lambda: replace(RESIDUAL, name="1st"), "name of a reduction must be an identifier"),
        (lambda: replace(RESIDUAL, lag=-1), "lag must be a whole number, 0 or more, not -1"),
        (
            lambda: replace(RESIDUAL, lag=0.5),  # type: ignore[arg-type]
            "lag must be a whole number, 0 or more, not 0.5",
        ),
        (lambda: replace(RESIDUAL, reads=(Read("change", (1, 0, 0)),)), "may read its own zones only"),
        (lambda: replace(SOLVE, name="s-1"), "name of a repeat must be an identifier"),
        (lambda: replace(SOLVE, body=()), "repeat 'solve' has no steps"),
        (lambda: replace(SOLVE, at_most=0), "can never see its own verdict"),
        (lambda: replace(SOLVE, at_most=2, until=replace(RESIDUAL, lag=2)), "at most 2 iterations with a lag of 2"),
    ],
)
def test_steps_reductions_and_repeats(declare: Callable[[], object], sentence: str) -> None:
    with pytest.raises(DeclarationError, match=sentence):
        declare()


def test_halos_may_be_lists_and_of_any_kind_of_whole_number() -> None:
    """Plans are kept by read, so that all must be one and hashable."""
    plain = Read("u", (1, 0, 0))
    for halo in ([1, 0, 0], np.array([1, 0, 0]), (np.int64(1), 0, 0)):
        read = Read("u", halo)  # type: ignore[arg-type]
        assert read == plain
        assert hash(read) == hash(plain)


def test_words_stand_for_ways_to_combine() -> None:
    assert replace(RESIDUAL, combine="max").combine is Combine.MAX  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("declare", "sentence"),
    [
        (lambda: lie([]), "at least one step"),
        (lambda: Splitting(((SMOOTH,), ())), "at least one step"),
        (lambda: lie([SMOOTH], [dt_reduction(), dt_reduction(1)]), "two different reductions are named 'dt'"),
        (lambda: lie([SMOOTH], [RESIDUAL, RESIDUAL]), "reduction 'residual' is listed twice"),
        (lambda: lie([SMOOTH, replace(SMOOTH, kernel=toys.blur)]), "two different steps are named 'smooth'"),
        (lambda: lie([SOLVE, replace(SOLVE, at_most=8)]), "two different repeats are named 'solve'"),
        (
            lambda: lie([SOLVE, replace(SOLVE, name="again", until=replace(RESIDUAL, lag=1))]),
            "two different reductions are named 'residual'",
        ),
        (lambda: lie([replace(SMOOTH, name="dt")], [dt_reduction()]), "'dt' names both a reduction and a step"),
        (lambda: lie([replace(SMOOTH, name="solve"), SOLVE]), "'solve' names both a repeat and a step"),
        (
            lambda: lie([replace(SMOOTH, uses=("dt",))]),
            r"step 'smooth' uses reduction 'dt', which the splitting does not declare \(it declares: none\)",
        ),
        (
            lambda: lie([replace(SMOOTH, uses=("residual",)), SOLVE], [dt_reduction()]),
            r"uses reduction 'residual', which the splitting does not declare \(it declares: dt\)",
        ),
    ],
)
def test_splittings(declare: Callable[[], object], sentence: str) -> None:
    with pytest.raises(DeclarationError, match=sentence):
        declare()


def test_the_same_step_may_stand_in_a_splitting_twice() -> None:
    splitting = lie([SMOOTH, replace(SMOOTH, fraction=0.5), SOLVE, SOLVE])
    assert [step.name for step in splitting.steps()] == ["smooth", "smooth", "relax", "relax"]
    assert [reduction.name for reduction in splitting.all_reductions()] == ["residual"]


def with_fixed_edge(problem: Problem) -> Problem:
    """Fixed edges, and fields that give no values there."""
    mesh = Mesh((12,), (1.0,), ((Edge.OUTFLOW, Edge.FIXED),))
    return replace(problem, mesh=mesh, fields=tuple(replace(f, fixed={}) for f in problem.fields))


def with_values_a_tile(problem: Problem) -> Problem:
    """A field that a step reads with a halo, declared to hold one value a tile."""
    fields = [replace(f, scratch=True, per_tile=True) if f.name == "u" else f for f in problem.fields]
    return replace(problem, fields=tuple(fields))


@pytest.mark.parametrize(
    ("change", "sentence"),
    [
        (lambda p: replace(p, fields=p.fields[1:]), "names field 'u'; the fields are change, v, w"),
        (lambda p: replace(p, fields=p.fields[:3]), "reduction 'residual' names field 'change'|step 'relax' names"),
        (lambda p: replace(p, fields=(*p.fields, Field("u", ("u",)))), "two fields share a name among u, w, v"),
        (
            lambda p: replace(p, fields=(*p.fields, Field("x", ("mass",)))),
            "a field cannot be named 'x': that is a dimension",
        ),
        (lambda p: replace(p, fields=(*p.fields, Field("u_component", ("c",)))), "cannot be named 'u_component'"),
        (lambda p: replace(p, cycles=0), "at least one cycle, not 0"),
        (
            lambda p: replace(p, splitting=lie([SMOOTH]), ended=toys.is_small),
            "ends by a value needs a reduction that yields it",
        ),
        (with_fixed_edge, "beyond the fixed high x edge, but the field gives no values there"),
        (with_values_a_tile, "reads field 'u' with a halo, but it holds one value a tile"),
    ],
)
def test_problems(change: Callable[[Problem], Problem], sentence: str) -> None:
    problem = Toy((12,)).problem()
    with pytest.raises(DeclarationError, match=sentence):
        change(problem)


def test_a_problem_refuses_tiles_that_its_halos_do_not_fit() -> None:
    problem = Toy((12, 9)).problem()
    assert len(problem.cut((4, 3))) == 9
    with pytest.raises(TilingError, match="step 'drift' reads a halo of 3 zones along x, but the narrowest tile has 2"):
        problem.cut((5, 3))


def test_a_call_knows_its_share_of_the_time_step_and_its_place() -> None:
    call = Call("burn", 4, -1, 7, (0, 0, 0), (2, 2, 1), (1.0,) * 3, (True,) * 3, {"dt": np.array([0.5])}, 0.5)
    assert call.dt == 0.25
    assert call.where() == "step burn, tile 7, cycle 4"
    call.iteration = 2
    assert call.where().endswith("iteration 2")
    call.count("zones", 3)
    call.count("zones", 4)
    assert call.counters == {"zones": 7}
