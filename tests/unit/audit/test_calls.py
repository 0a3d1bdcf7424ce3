"""One call: what it asks for, what it raises, how its outcome is compared and put into words."""

from __future__ import annotations

import numpy as np
import pytest

from breakstep.audit.calls import Outcome, call_part, first_difference, largest_gap, name_writes
from breakstep.mesh.fields import Field
from breakstep.steps.reduction import Combine, Reduction
from breakstep.steps.step import Array, Call, Read, Step
from tests.audit_cases.common import Arrays, as_it_is

CALL = Call("s", 1, -1, 2, (4, 0, 0), (2, 2, 1), (1.0, 1.0, 1.0), (True, True, False), {})
FIELDS = {"u": Field("u", ("u",)), "w": Field("w", ("w",))}
OTHERS = {"u": np.zeros((1, 2, 2, 1)), "w": np.full((1, 2, 2, 1), 2.0)}


def asks(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"u": arrays["u"] + arrays["w"] * call.dt}


def stumbles(arrays: Arrays, call: Call) -> dict[str, Array]:
    return {"u": arrays["nothing"]}


def adds_in_place(arrays: Arrays, call: Call) -> dict[str, Array]:
    arrays["u"][...] += 1.0
    return {"u": arrays["u"]}


def largest(arrays: Arrays, call: Call) -> Array:
    return arrays["u"].max()  # type: ignore[return-value]


def step(kernel: object, uses: tuple[str, ...] = ()) -> Step:
    return Step("s", kernel, (Read("u"),), ("u",), uses)  # type: ignore[arg-type]


def test_what_was_not_declared_is_served_and_noted() -> None:
    outcome = call_part(step(asks), {"u": OTHERS["u"]}, CALL, OTHERS, {"dt": np.array([0.5])})
    assert outcome.asked_fields == ("w",)
    assert outcome.asked_values == ("dt",)
    assert outcome.arrays is not None
    assert np.all(outcome.arrays["u"] == 1.0)


def test_what_was_declared_is_not_noted() -> None:
    declared = Step("s", asks, (Read("u"), Read("w")), ("u",), ("dt",))
    outcome = call_part(declared, OTHERS, CALL, OTHERS, {"dt": np.array([0.5])})
    assert (outcome.asked_fields, outcome.asked_values) == ((), ())


def test_an_exception_is_an_outcome_with_its_line() -> None:
    outcome = call_part(step(stumbles), {"u": OTHERS["u"]}, CALL, OTHERS, {})
    assert outcome.arrays is None
    assert outcome.kind == "KeyError"
    assert outcome.place.startswith("test_calls.py, line ")


@pytest.mark.parametrize("made", [None, 3.0, {"u": [1.0]}])
def test_a_return_that_is_no_mapping_of_arrays_is_an_outcome(made: object) -> None:
    outcome = call_part(step(lambda arrays, call: made), {"u": OTHERS["u"]}, CALL, OTHERS, {})
    assert outcome.kind == "returned"


def test_a_reductions_number_is_a_vector() -> None:
    reduction = Reduction("r", largest, (Read("u"),), Combine.MAX, as_it_is)
    outcome = call_part(reduction, {"u": OTHERS["u"]}, CALL, OTHERS, {})
    assert outcome.arrays is not None
    assert outcome.arrays[""] == 0.0


def test_wrong_writes_are_named() -> None:
    outcome = Outcome({"u": np.zeros((1, 3, 2, 1)), "w": OTHERS["w"]})
    clauses = name_writes(outcome, step(asks), FIELDS, (2, 2, 1))
    assert clauses == [
        "returns 'w', which it does not declare",
        "returns 'u' as float64 of shape (1, 3, 2, 1) where float64 of (1, 2, 2, 1) belongs",
    ]


def test_nan_equals_nan_and_zero_is_not_minus_zero() -> None:
    nan, zero, minus = (Outcome({"u": np.full((1, 1, 1, 1), x)}) for x in (np.nan, 0.0, -0.0))
    assert nan.same(nan.copied())
    assert not zero.same(minus)


def test_the_largest_difference_is_put_into_words() -> None:
    one = Outcome({"u": np.array([1.0, 2.0]).reshape(1, 2, 1, 1)})
    two = Outcome({"u": np.array([1.0, 3.0]).reshape(1, 2, 1, 1)})
    assert first_difference(one, two, (10, 0, 0)) == "u in zone (11, 0, 0): 2 against 3"
    assert largest_gap(one, two) == pytest.approx(1.0 / 3.0, rel=1e-15)  # one rounding
    assert largest_gap(one, Outcome(None)) == np.inf
