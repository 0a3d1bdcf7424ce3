"""Clocks: an offset comes from the shortest round trip, and is wrong by no more than it says."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from breakstep.engine.clocks import ClockReading, align, clock, drift, now

TRIPS = st.tuples(st.integers(0, 10**9), st.integers(0, 10**6), st.integers(0, 10**6))


@given(st.integers(-(10**12), 10**12), st.lists(TRIPS, min_size=1, max_size=9))
def test_the_offset_is_right_to_within_its_residual(true_offset: int, trips: list[tuple[int, int, int]]) -> None:
    """Whatever the way there and the way back take of each round trip."""
    exchanges = [(sent, sent + there + true_offset, sent + there + back) for sent, there, back in trips]
    offset, residual = align(exchanges)
    assert abs(offset - true_offset) <= residual
    assert residual <= min(there + back + 1 for _, there, back in trips) / 2


@pytest.mark.parametrize(
    ("before", "after", "expected"),
    [
        ((0, 0), (0, 0), 0),  # one clock
        ((500, 40), (500, 10), 40),  # no drift: the worse of the two readings
        ((500, 40), (560, 10), 70),  # 60 of drift and what the second reading may be off by
        ((500, 40), (440, 10), 70),
    ],
)
def test_drift_bounds_the_error_over_the_whole_run(
    before: tuple[int, int], after: tuple[int, int], expected: int
) -> None:
    assert drift(ClockReading(*before, cpu=0), ClockReading(*after, cpu=0)) == expected


def test_a_process_knows_its_boot_and_its_clock_runs_on() -> None:
    (boot, cpu), first = clock(), now()
    assert clock()[0] == boot
    assert clock()[1] >= cpu > 0
    assert now() >= first
