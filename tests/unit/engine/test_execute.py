"""Executing one task: what a kernel is given, and what is refused of what it gives back."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import pytest

from breakstep.engine.execute import Inputs, Output, Site, check_arrays, execute
from breakstep.engine.program import Program
from breakstep.errors import KernelError
from breakstep.mesh.fields import Field
from breakstep.mesh.tiling import Tile
from breakstep.steps.splitting import lie
from breakstep.steps.step import Array, Call, Read, Step
from tests import toys
from tests.toys import Toy, dt_reduction

FIELDS = {"u": Field("u", ("heat", "salt"))}
TILE = Tile(3, (1, 0, 0), (4, 0, 0), (2, 3, 1))


def good() -> Array:
    """An array that fits."""
    return np.arange(12.0).reshape(2, 2, 3, 1)


def with_bad_zone(value: float) -> Array:
    """One zone of the second component is not finite."""
    array = good()
    array[1, 1, 2, 0] = value
    return array


@pytest.mark.parametrize(
    ("made", "sentence"),
    [
        (None, "here: expected a mapping of field to array, got NoneType"),
        ([good()], "expected a mapping of field to array, got list"),
        ({}, "expected new arrays for u, got nothing"),
        ({"u": good(), "w": good()}, "expected new arrays for u, got u, w"),
        ({"u": 3.0}, r"field 'u' must be float64 of shape \(2, 2, 3, 1\), got float"),
        ({"u": good()[:, :, :2]}, r"got float64 \(2, 2, 2, 1\)"),
        ({"u": good().astype(np.float32)}, r"got float32 \(2, 2, 3, 1\)"),
        ({"u": good().astype(">f8")}, "got >f8"),
        ({"u": with_bad_zone(np.nan)}, r"here: u salt is nan in zone \(5, 2, 0\)"),
        ({"u": with_bad_zone(-np.inf)}, r"u salt is -inf in zone \(5, 2, 0\)"),
        ({"u": np.asfortranarray(with_bad_zone(np.inf))}, r"u salt is inf in zone \(5, 2, 0\)"),
    ],
)
def test_unusable_arrays_are_refused(made: object, sentence: str) -> None:
    with pytest.raises(KernelError, match=sentence):
        check_arrays(made, ("u",), FIELDS, TILE, "here")


def test_good_arrays_come_back_protected_and_in_memory_order() -> None:
    """A sum over a transposed array can differ in its last bits; a journey between workers would undo it."""
    for array in (good(), np.asfortranarray(good()), good()[:, ::-1]):
        (made,) = check_arrays({"u": array}, ("u",), FIELDS, TILE, "here").values()
        assert np.array_equal(made, array)
        assert made.flags.c_contiguous
        assert not made.flags.writeable


def test_a_fresh_array_is_not_copied() -> None:
    array = good()
    assert check_arrays({"u": array}, ("u",), FIELDS, TILE, "here")["u"] is array


@dataclass
class Spy:
    """A kernel that remembers what it was given."""

    seen: list[tuple[dict[str, Array], Call]] = field(default_factory=list)

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> dict[str, Array]:
        self.seen.append((dict(arrays), call))
        return {"u": np.full((1, *call.shape), 1.0 + call.cycle)}


def program_of(*steps: Step, reductions: tuple[Any, ...] = (), fuse: bool = True) -> Program:
    """Twelve zones in four tiles."""
    problem = Toy((12,), repeats=False).problem()
    return Program(replace(problem, splitting=lie(steps, reductions)), (3,), fuse)


def run(program: Program, stage: int, values: Mapping[str, Array] | None = None, **fields: Array) -> Output:
    """Execute a stage at tile 2 of cycle 5 with neighbours that hold the tile's own zones."""
    own = {**program.initial(2), **fields}
    rims: dict[str, dict[Any, Array]] = {}
    for read in program.template.stages[stage].reads:
        for rim in () if read.is_local else program.plans.plan(2, read).rims:
            rims.setdefault(read.field, {})[rim.offset] = own[read.field][(slice(None), *rim.source)]
    return execute(program, Site(stage, 2, 5, -1), Inputs(own, rims, values or {}))


def test_a_kernel_gets_what_its_step_declares_and_no_more() -> None:
    spy = Spy()
    run(program_of(Step("spy", spy, (Read("w", (2, 0, 0)), Read("v")), ("u",))), 0)
    (arrays, call) = spy.seen[0]
    assert {name: array.shape for name, array in arrays.items()} == {"w": (2, 7, 1, 1), "v": (1, 3, 1, 1)}
    assert all(not array.flags.writeable for array in arrays.values())
    assert (call.step, call.cycle, call.iteration, call.tile) == ("spy", 5, -1, 2)
    assert (call.origin, call.shape, call.active) == ((6, 0, 0), (3, 1, 1), (True, False, False))
    assert call.values == {}


def test_fused_steps_do_not_see_each_other_s_values() -> None:
    """Else a step that forgot to declare ``uses`` would run fused and fail alone."""
    spy, first = Spy(), Step("first", toys.grow, (Read("u"), Read("w")), ("u",), uses=("dt",))
    program = program_of(first, Step("spy", spy, (Read("u"),), ("u",)), reductions=(dt_reduction(),))
    stage = next(s for s in program.template.stages if s.steps)
    assert stage.name == "first+spy"
    run(program, stage.index, {"dt": np.array([0.5, 0.0])})
    assert spy.seen[0][1].values == {}


def test_later_steps_of_a_stage_read_what_earlier_ones_made() -> None:
    spy = Spy()
    program = program_of(Step("make", Spy(), (Read("u", (1, 0, 0)),), ("u",)), Step("spy", spy, (Read("u"),), ("u",)))
    output = run(program, 0)
    assert (spy.seen[0][0]["u"] == 6.0).all()
    assert list(output.fields) == ["u"]
    assert [(i.what, i.step) for i in output.intervals] == [("halo", "make"), ("kernel", "make"), ("kernel", "spy")]


def test_a_task_says_how_long_and_how_much() -> None:
    program = program_of(Step("drift", toys.drift, (Read("w", (3, 0, 0)),), ("w",)), reductions=(dt_reduction(),))
    output = run(program, 1)
    assert output.counters == [("drift", "zones", 3)]
    assert output.nbytes == 2 * 3 * 8
    assert all(i.end >= i.start and i.cpu >= 0 for i in output.intervals)
    assert output.partials["dt"] is not None


def test_a_converged_iteration_hands_its_fields_on() -> None:
    program = Program(Toy((12,)).problem(), (3,))
    (stage,) = (s for s in program.template.stages if s.repeat)
    own = program.initial(1)
    output = execute(program, Site(stage.index, 1, 0, 4), Inputs(own, passes=True))
    assert output.skipped
    assert output.fields["v"] is own["v"]
    assert output.partials == {"residual": None}
    assert output.nbytes == 0
    assert output.intervals == []


@pytest.mark.parametrize(
    ("fault", "sentence"),
    [
        ("nan", r"step broken, tile 2, cycle 5: u u is nan in zone \(8, 0, 0\)"),
        ("infinite", r"u u is -inf in zone \(6, 0, 0\)"),
        ("misshapen", r"must be float64 of shape \(1, 3, 1, 1\), got float64 \(1, 2, 1, 1\)"),
        ("single", "must be float64"),
        ("missing", "expected new arrays for u, got nothing"),
        ("extra", "expected new arrays for u, got u, w"),
        ("nothing", "got NoneType"),
        ("mutates", "step broken, tile 2, cycle 5: .*read-only.*; a function may not change the arrays it is given"),
        ("divides", "step broken, tile 2, cycle 5: the user's function raised ZeroDivisionError"),
    ],
)
def test_misbehaving_kernels_are_found_out(fault: str, sentence: str) -> None:
    program = program_of(Step("broken", toys.Faulty(fault, 2, 5), (Read("u"),), ("u",)))  # type: ignore[arg-type]
    with pytest.raises(KernelError, match=sentence) as caught:
        run(program, 0)
    assert {key: caught.value.details[key] for key in ("tile", "cycle")} == {"tile": 2, "cycle": 5}


@pytest.mark.parametrize(
    ("vector", "sentence"),
    [
        (1.0, r"step dt, tile 2, cycle 5: a reduction's kernel must return a vector, got shape \(\)"),
        (np.zeros((2, 1)), "must return a vector"),
        ("fast", "step dt, tile 2, cycle 5: the user's function raised ValueError"),
    ],
)
def test_contributions_must_be_vectors(vector: object, sentence: str) -> None:
    reduction = replace(dt_reduction(), kernel=lambda arrays, call: vector)  # type: ignore[arg-type, return-value]
    step = Step("drift", toys.drift, (Read("w", (3, 0, 0)),), ("w",))
    with pytest.raises(KernelError, match=sentence):
        run(program_of(step, reductions=(reduction,)), 1)


def test_reductions_see_no_values_wherever_they_are_fused() -> None:
    """Measured at the start there are none; fused behind a step that uses dt there must be none either."""
    seen: list[Mapping[str, Array]] = []

    def spy(arrays: Mapping[str, Array], call: Call) -> Array:
        seen.append(call.values)
        return np.zeros(1)

    reduction = replace(dt_reduction(), kernel=spy)
    step = Step("grow", toys.grow, (Read("u"), Read("w")), ("u",), uses=("dt",))
    run(program_of(step, reductions=(reduction,)), 1, {"dt": np.array([0.5, 0.0])})
    assert seen == [{}]


def test_write_protection_does_not_depend_on_the_splitting() -> None:
    """Inputs of a first step come from another task, of a second from the same one."""
    for steps in (
        [Step("spy", Spy(), (Read("u"),), ("u",))] * 2,
        [Step("spy", Spy(), (Read("u", (1, 0, 0)),), ("u",))],
    ):
        run(program_of(*steps), 0)
        for arrays, _ in steps[-1].kernel.seen:  # type: ignore[attr-defined]
            assert not arrays["u"].flags.writeable
