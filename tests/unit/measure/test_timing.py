"""Taking turns on a clock that only the contenders move."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import pytest

from breakstep.measure.timing import Effort, Row, Spread, enough_calls, ratio, take_turns


@dataclass
class FakeClock:
    """Time passes only while somebody works; remembers who did."""

    now: float = 0.0
    order: list[str] = field(default_factory=list)

    def __call__(self) -> float:
        return self.now

    def worker(self, name: str, *seconds: float) -> Callable[[], None]:
        """Work that takes each of these times in turn, and the last one for ever after."""
        left = list(seconds)

        def work() -> None:
            self.order.append(name)
            self.now += left.pop(0) if len(left) > 1 else left[0]

        return work


def test_contenders_take_turns_in_alternating_order() -> None:
    clock = FakeClock()
    works = {"a": clock.worker("a", 1.0), "b": clock.worker("b", 2.0)}
    samples = take_turns(works, Effort(rounds=3, shortest=1.0), clock)
    warm_up, calibration = ["a", "b"], ["a", "b"]
    assert clock.order == [*warm_up, *calibration, "a", "b", "b", "a", "a", "b"]
    assert samples == {"a": [1.0, 1.0, 1.0], "b": [2.0, 2.0, 2.0]}


def test_the_first_call_does_not_count() -> None:
    clock = FakeClock()
    samples = take_turns({"a": clock.worker("a", 100.0, 1.0)}, Effort(2, 1.0), clock)
    assert samples == {"a": [1.0, 1.0]}


def test_short_work_is_repeated_until_it_can_be_measured() -> None:
    clock = FakeClock()
    assert enough_calls(clock.worker("a", 0.25), 1.0, clock) == 4
    samples = take_turns({"a": clock.worker("a", 0.25)}, Effort(2, 1.0), clock)
    assert samples == {"a": [0.25, 0.25]}


def test_work_that_the_clock_never_sees_ends() -> None:
    assert enough_calls(lambda: None, 1.0, lambda: 0.0) == 1 << 20


def test_ratios_are_taken_round_by_round() -> None:
    """A machine that slows down threefold in the last round changes no ratio."""
    samples = {"slow": [4.0, 4.0, 12.0], "fast": [2.0, 2.0, 6.0]}
    assert ratio(samples, "slow", "fast") == Spread(2.0, 2.0, 2.0)


def test_spread_is_the_middle_half() -> None:
    assert Spread.of([5.0, 1.0, 3.0, 2.0, 4.0]) == Spread(median=3.0, low=2.0, high=4.0)


@pytest.mark.parametrize(
    ("needed", "judged", "met"),
    [(3.0, True, True), (3.1, True, False), (None, True, None), (3.0, False, None)],
)
def test_a_row_says_whether_its_median_is_enough(needed: float | None, judged: bool, met: bool | None) -> None:
    row = Row("x", 1.0, 3.0, Spread(3.0, 2.0, 4.0), needed, judged)
    assert row.met is met


def test_a_row_is_plain_figures() -> None:
    row = Row("x", 1.0, 3.0, Spread(3.0, 2.0, 4.0), 5.0, details={"order": 8})
    assert row.as_json() == {
        "what": "x",
        "ours": 1.0,
        "other": 3.0,
        "ratio": {"median": 3.0, "low": 2.0, "high": 4.0},
        "needed": 5.0,
        "met": False,
        "order": 8,
    }
