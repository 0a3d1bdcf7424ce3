"""What the recording calls cost, measured on a clock of our own and on the real one."""

from __future__ import annotations

from itertools import count

from breakstep.measure import recording
from breakstep.measure.selfcheck import RECORDING_LIMIT


def test_the_cost_is_per_task() -> None:
    """A clock that moves by one second a reading, read before and after."""
    found = recording.calls_us(1, clock=count(0, 10**9).__next__)
    assert found["median"] == 10**6 / recording.TASKS


def test_everything_is_recorded() -> None:
    record = recording._record(10).record
    assert [len(table) for table in (record.tasks, record.intervals, record.counters)] == [10, 40, 60]


def test_recording_takes_less_than_its_limit_of_five_milliseconds() -> None:
    """Measured at 0.3 to 0.6 % on two shared cores; CPU time of one thread, so other programs matter little."""
    assert recording.calls_us(3)["low"] < RECORDING_LIMIT * 5000.0
