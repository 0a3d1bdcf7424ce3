"""Reductions: the order of combining, NaN, pass-through, and rows."""

from __future__ import annotations

import numpy as np
import pytest

from breakstep.errors import DeclarationError, KernelError
from breakstep.steps.reduction import Combine, Reduction, combine, finish_rows
from breakstep.steps.step import Read
from tests import toys
from tests.toys import dt_reduction


def vectors(*values: float) -> list[np.ndarray | None]:
    """Vectors of one entry."""
    return [np.array([value]) for value in values]


@pytest.mark.parametrize(("kind", "expected"), [(Combine.MIN, -2.0), (Combine.MAX, 3.0), (Combine.SUM, 2.0)])
def test_entries_are_combined_one_by_one(kind: Combine, expected: float) -> None:
    made = combine(kind, vectors(1.0, 3.0, -2.0))
    assert made is not None
    assert made.tolist() == [expected]


@pytest.mark.parametrize("kind", list(Combine))
@pytest.mark.parametrize("place", [0, 1, 2])
def test_nan_survives_wherever_it_stands(kind: Combine, place: int) -> None:
    parts = [1.0, 2.0, 3.0]
    parts[place] = np.nan
    made = combine(kind, vectors(*parts))
    assert made is not None
    assert np.isnan(made).all()


def test_sums_add_in_the_order_given() -> None:
    """Floating-point addition is not associative: 1e16 + 1 - 1e16 is 0 from left to right, 1 otherwise."""
    first, second = combine(Combine.SUM, vectors(1e16, 1.0, -1e16)), combine(Combine.SUM, vectors(1e16, -1e16, 1.0))
    assert first is not None
    assert second is not None
    assert (first[0], second[0]) == (0.0, 1.0)


def test_tiles_that_passed_through_are_left_out() -> None:
    made = combine(Combine.SUM, [None, np.array([2.0]), None])
    assert made is not None
    assert made.tolist() == [2.0]
    assert combine(Combine.SUM, [None, None]) is None


def test_combining_leaves_the_contributions_alone() -> None:
    parts = [np.array([1.0]), np.array([2.0])]
    made = combine(Combine.SUM, list(parts))
    assert [part.tolist() for part in parts] == [[1.0], [2.0]]
    assert made is not None
    alone = combine(Combine.SUM, [parts[0]])
    assert alone is not None
    assert not np.shares_memory(alone, parts[0])


def test_contributions_of_different_lengths_are_refused() -> None:
    with pytest.raises(KernelError, match=r"different lengths \(1, 2\)"):
        combine(Combine.MAX, [np.zeros(2), np.zeros(1)])


def test_each_row_is_finished_from_the_one_before() -> None:
    """With a lag, the first cycles share one measurement but not one time."""
    rows = finish_rows(dt_reduction(2), np.array([1.0]), None, 3)
    assert rows.shape == (3, 2)
    assert rows[:, 0].tolist() == [0.05, 0.05, 0.05]
    assert rows[:, 1].tolist() == [0.0, 0.05, 0.1]


def test_a_reduction_passed_through_repeats_its_result() -> None:
    before = np.array([0.25, 3.0])
    assert finish_rows(dt_reduction(), None, before, 1).tolist() == [[0.25, 3.0]]
    with pytest.raises(DeclarationError, match="passed through before it had a result"):
        finish_rows(dt_reduction(), None, None, 1)


def test_results_are_write_protected() -> None:
    """A kernel that changed dt would change it for its neighbours, but only on its own worker."""
    assert not finish_rows(dt_reduction(), np.array([1.0]), None, 1).flags.writeable


@pytest.mark.parametrize(
    ("finish", "sentence"),
    [
        (lambda c, p: 1.0, r"finish of reduction dt: expected a vector, got shape \(\)"),
        (lambda c, p: c if p is None else np.zeros(3), r"expected a vector of 1, as before, got shape \(3,\)"),
        (lambda c, p: 1 / 0, "finish of reduction dt: the user's function raised ZeroDivisionError"),
        (lambda c, p: np.add(c, 1.0, out=c), "a function may not change the arrays it is given"),
    ],
)
def test_finish_functions_are_held_to_their_contract(finish: object, sentence: str) -> None:
    reduction = Reduction("dt", toys.rate, (Read("u"),), Combine.MAX, finish)  # type: ignore[arg-type]
    with pytest.raises(KernelError, match=sentence):
        finish_rows(reduction, np.array([1.0]), None, 2)
