"""Stages: which steps share a task, what a stage reads from outside, and the names of barriers."""

from __future__ import annotations

from dataclasses import replace

import pytest

from breakstep.errors import DeclarationError
from breakstep.graph.stages import RepeatStages, Stage, Template, build_template, can_follow, parse_barriers
from breakstep.steps.reduction import Combine, Reduction
from breakstep.steps.splitting import Repeat, Splitting, lie
from breakstep.steps.step import Read, Step
from tests import toys
from tests.toys import Toy, dt_reduction


def step(name: str, *reads: Read, writes: tuple[str, ...] = ("u",), uses: tuple[str, ...] = ()) -> Step:
    """A step whose kernel never runs."""
    return Step(name, toys.smooth, reads, writes, uses)


WIDE = step("wide", Read("u", (1, 0, 0)))
LOCAL = step("local", Read("u"))
TIMED = step("timed", Read("u"), uses=("dt",))
RESIDUAL = Reduction("residual", toys.largest_change, (Read("change"),), Combine.MAX, toys.as_it_is)
SOLVE = Repeat("solve", (step("relax", Read("v", (1, 0, 0)), writes=("v", "change")),), RESIDUAL, toys.is_small, 9)


def names(template: Template) -> list[str]:
    """Names of the first order's stages in order."""
    (order, *_) = template.orders
    found: list[str] = []
    for node in order:
        found += [stage.name for stage in (node.stages if isinstance(node, RepeatStages) else (node,))]
    return found


@pytest.mark.parametrize(
    ("before", "after", "fits"),
    [
        ([WIDE], LOCAL, True),
        ([LOCAL], WIDE, False),  # a neighbour's task must come between
        ([WIDE], TIMED, False),  # the first need not wait for dt
        ([step("first", Read("u"), uses=("dt",)), LOCAL], TIMED, True),
        ([], LOCAL, False),
    ],
)
def test_a_step_follows_in_the_same_task_only_if_nothing_can_lie_between(
    before: list[Step], after: Step, fits: bool
) -> None:
    assert can_follow(before, after) is fits


def test_local_steps_are_fused_behind_the_step_they_follow() -> None:
    splitting = lie([WIDE, LOCAL, TIMED, replace(LOCAL, name="last"), WIDE], [dt_reduction()])
    assert names(build_template(splitting)) == ["wide+local", "timed+last", "wide"]
    assert names(build_template(splitting, fuse=False)) == ["wide", "local", "timed", "last", "wide", "dt"]


def test_a_repeat_is_a_boundary_for_fusing() -> None:
    splitting = lie([WIDE, SOLVE, LOCAL], [dt_reduction()])
    assert names(build_template(splitting)) == ["wide", "relax", "local"]
    assert names(build_template(splitting, fuse=False)) == ["wide", "relax", "residual", "local", "dt"]


def test_reductions_after_a_repeat_have_a_stage_of_their_own() -> None:
    template = build_template(lie([WIDE, SOLVE], [dt_reduction()]))
    assert names(template) == ["wide", "relax", "dt"]
    assert template.start is not None
    assert template.start.name == "dt"


def test_without_reductions_nothing_is_measured_at_the_start() -> None:
    template = build_template(lie([WIDE, LOCAL]))
    assert template.start is None
    assert names(template) == ["wide+local"]


def test_stages_read_from_outside_what_they_do_not_make() -> None:
    pair = (step("a", Read("u", (1, 0, 0)), Read("w"), writes=("v",)), step("b", Read("v"), Read("u"), writes=("u",)))
    stage = Stage(0, pair, (Reduction("n", toys.rate, (Read("u"), Read("x")), Combine.MAX, toys.as_it_is),))
    assert stage.reads == (Read("u", (1, 0, 0)), Read("w"), Read("x"))
    assert stage.writes == ("v", "u")
    assert stage.name == "a+b"


def test_stages_of_a_repeat_also_read_what_they_must_hand_on() -> None:
    (relax,) = (s for s in build_template(lie([SOLVE])).stages if s.repeat)
    assert {read.field for read in relax.reads} == {"v", "change"}
    assert Read("v", (1, 0, 0)) in relax.reads


def test_uses_of_fused_steps_are_joined() -> None:
    first = step("first", Read("u"), uses=("dt",))
    (stage,) = (s for s in build_template(lie([first, LOCAL, TIMED], [dt_reduction()])).stages if s.steps)
    assert stage.uses == ("dt",)
    assert [r.name for r in stage.partials] == ["dt"]


def test_carried_and_needed_fields() -> None:
    """A field written before it is read within each cycle is neither; the measurement at the start counts."""
    make, use = step("make", Read("u"), writes=("v",)), step("use", Read("v"), Read("w"), writes=("u",))
    template = build_template(lie([make, use], [Reduction("n", toys.rate, (Read("w"),), Combine.MAX, toys.as_it_is)]))
    assert template.carried == {"u", "w"}
    start_only = Reduction("n", toys.rate, (Read("v"),), Combine.MAX, toys.as_it_is)
    assert build_template(lie([make, use], [start_only])).needed == {"u", "v", "w"}


def test_a_field_made_in_the_first_order_is_carried_to_the_second_but_needs_no_initial_state() -> None:
    make, use = step("make", Read("u"), writes=("v",)), step("use", Read("v"), writes=("u",))
    template = build_template(Splitting(((make, use), (use, make))))
    assert template.carried == {"u", "v"}
    assert template.needed == {"u"}


def test_barriers_are_named_by_step_repeat_and_reduction() -> None:
    template = build_template(Toy().splitting())
    assert template.barrier_names() == ("dt", "smooth", "drift", "grow", "trade", "blur", "relax", "solve")


def test_a_name_stands_for_every_stage_that_holds_it() -> None:
    template = build_template(Toy(two_passes=True).splitting(), fuse=False)
    where = {name: template.stages_with_barrier([name]) for name in template.barrier_names()}
    stages = {stage.index: stage.name for stage in template.stages}
    assert [stages[i] for i in sorted(where["solve"])] == ["relax", "settle", "residual"]
    assert [stages[i] for i in sorted(where["relax"])] == ["relax"]
    assert [stages[i] for i in sorted(where["dt"])] == ["dt", "dt"]


def test_parsing_a_choice_of_barriers() -> None:
    template = build_template(Toy().splitting())
    assert parse_barriers(template, "lockstep") == template.barrier_names()
    assert parse_barriers(template, "tasked") == ()
    assert parse_barriers(template, " drift, solve,") == ("drift", "solve")
    with pytest.raises(DeclarationError, match="expected lockstep, tasked or a list of names, not ' ,'"):
        parse_barriers(template, " ,")


def test_an_unknown_barrier_lists_the_choices() -> None:
    template = build_template(lie([WIDE, LOCAL]))
    with pytest.raises(DeclarationError) as caught:
        parse_barriers(template, "wide,burning")
    assert str(caught.value) == ("no barrier is called burning; choose from lockstep, tasked or a list of wide, local")
