"""Printed parts add up to the printed whole, and no number is further off than its last figure."""

from __future__ import annotations

from decimal import Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from breakstep.profile.rounding import Scale


@pytest.mark.parametrize(
    ("ns", "text"),
    [
        (0, "0.000 us"),
        (7, "0.007 us"),
        (99_999, "99.999 us"),
        (100_000, "0.1000 ms"),
        (1_234_567, "1.2346 ms"),
        (21_770_049, "21.770 ms"),
        (999_999_999, "1000.00 ms"),
        (1_234_567_890, "1.2346 s"),
        (123_456_000_000_000, "123456 s"),
    ],
)
def test_five_figures(ns: int, text: str) -> None:
    assert Scale.of(ns).text(ns) == text


def test_largest_remainders() -> None:
    """Three thirds of 10 ms: 3.3333 each, and the one that is missing goes to the largest remainder."""
    scale = Scale.of(10_000_000)
    assert scale.text(10_000_000) == "10.000 ms"
    assert scale.rounded([3_333_300, 3_333_400, 3_333_300]) == ["3.333", "3.334", "3.333"]
    assert scale.rounded([]) == []


@given(st.lists(st.integers(0, 10**12), min_size=1, max_size=30))
def test_parts_add_up_as_printed(parts: list[int]) -> None:
    scale = Scale.of(sum(parts))
    printed = [Decimal(number) for number in scale.rounded(parts)]
    assert sum(printed) == Decimal(scale.number(sum(parts)))
    for part, number in zip(parts, printed, strict=True):
        assert abs(number * scale.unit_ns - part) < scale.step_ns
