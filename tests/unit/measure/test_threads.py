"""Crews: members that obey orders by pipe, and turns between crews."""

from __future__ import annotations

import threading
from collections.abc import Callable
from multiprocessing import Pipe

import pytest

from breakstep.errors import BreakstepError
from breakstep.measure import threads
from breakstep.measure.timing import Effort


class Ledger:
    """A job that notes which thread prepared and called it."""

    def __init__(self) -> None:
        self.prepared: list[int] = []
        self.called: list[int] = []

    def prepare(self) -> Callable[[], object]:
        self.prepared.append(threading.get_ident())
        return lambda: self.called.append(threading.get_ident())


@pytest.fixture
def ledger(monkeypatch: pytest.MonkeyPatch) -> Ledger:
    ledger = Ledger()
    monkeypatch.setattr(threads, "JOBS", {"job": ledger.prepare})
    return ledger


def test_every_member_prepares_once_and_does_the_same_work(ledger: Ledger) -> None:
    with threads.thread_crew(2) as crew:
        threads.wall_seconds(crew, "job", 3)
        threads.wall_seconds(crew, "job", 4)
    assert len(set(ledger.prepared)) == len(ledger.prepared) == 2
    assert sorted(ledger.called.count(member) for member in ledger.prepared) == [7, 7]
    assert threading.get_ident() not in ledger.called


def test_the_crew_leaves_with_its_context(ledger: Ledger) -> None:
    before = threading.active_count()
    with threads.thread_crew(3) as crew:
        threads.wall_seconds(crew, "job", 1)
        assert threading.active_count() == before + 3
    assert threading.active_count() == before


def test_crews_take_turns_after_a_warm_up(monkeypatch: pytest.MonkeyPatch) -> None:
    orders: list[tuple[str, int]] = []

    def wall_seconds(crew: str, _job: str, calls: int) -> float:
        orders.append((crew, calls))
        return float(len(orders))

    monkeypatch.setattr(threads, "wall_seconds", wall_seconds)
    samples = threads.crew_turns({"a": "a", "b": "b"}, "job", 5, Effort(2, 1.0))  # type: ignore[dict-item]
    assert orders == [("a", 1), ("b", 1), ("a", 5), ("b", 5), ("b", 5), ("a", 5)]
    assert samples == {"a": [3.0, 6.0], "b": [4.0, 5.0]}


def test_a_member_that_ended_early_is_an_error() -> None:
    ours, theirs = Pipe()
    theirs.close()
    with ours, pytest.raises(BreakstepError, match="ended early"):
        threads.wall_seconds([ours], "job", 1)


@pytest.mark.parametrize(("gain", "cores", "met"), [(2.0, 2, True), (1.2, 2, None), (2.0, 1, None)])
def test_nothing_is_judged_without_two_free_cores(
    monkeypatch: pytest.MonkeyPatch, gain: float, cores: int, met: bool | None
) -> None:
    """Two processes take 2 s for twice the work that one alone does in ``gain`` s."""
    monkeypatch.setattr(threads, "cores", lambda: cores)
    samples = {"processes": [2.0], "threads": [2.1], "alone": [gain]}
    monkeypatch.setattr(threads, "crew_turns", lambda *_: samples)
    row = threads._row("job", 1, Effort(1, 1.0), [None, None], [None, None])  # type: ignore[list-item]
    assert row.met is met
    assert row.ratio.median == 2.0 / 2.1
    assert row.details is not None
    assert row.details["two_processes_over_one"] == gain
