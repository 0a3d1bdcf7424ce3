"""Steps by timer: how long they wait, what they hand on, and that every number received counts."""

from __future__ import annotations

import pickle
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from breakstep.engine.program import Program
from breakstep.engine.run import RunOptions, RunResult
from breakstep.engine.serial import SerialDispatch
from breakstep.engine.warm import warm_up
from breakstep.scenario.invent_timers import Invention
from breakstep.scenario.load import Scenario
from breakstep.steps.timed import MODULUS, MOST_NUMBERS, RAMP, STATE, Mix, Schedule, directions, wait_until
from tests.records import invented


def run(scenario: Scenario) -> RunResult:
    program = Program(scenario.problem(), scenario.tile, scenario.run.fuse)
    result = SerialDispatch().run(program, RunOptions())
    assert result.failure is None
    return result


def test_a_schedule_repeats_its_last_iteration() -> None:
    schedule = Schedule(np.array([[[1.0, 2.0], [3.0, 4.0]], [[5.0, 6.0], [np.nan, np.nan]]]))
    assert [schedule.at(0, i, 1) for i in (-1, 0, 1, 2)] == [2.0, 2.0, 4.0, 4.0]
    assert [schedule.at(1, i, 0) for i in (0, 1)] == [5.0, 5.0]
    assert [schedule.left(0, i) for i in (0, 1, 2)] == [1, 0, -1]


def test_one_schedule_a_process() -> None:
    schedule = Schedule(np.ones((2, 1, 3)))
    sent = pickle.dumps(schedule)
    first, second = pickle.loads(sent), pickle.loads(sent)
    assert first is second
    assert first.digest == schedule.digest
    assert not first.seconds.flags.writeable


def test_a_wait_is_never_short() -> None:
    for nanoseconds in (0, 1_000, 3_000_000):
        until = time.perf_counter_ns() + nanoseconds
        wait_until(until)
        assert time.perf_counter_ns() >= until


def test_sums_stay_exact() -> None:
    """The largest number that can occur is a whole number that floating point holds."""
    weights = sum(range(1, 1 + len(list(directions((1, 1, 1), corners=True)))))
    assert weights == 351
    assert weights * MOST_NUMBERS * (MODULUS + RAMP) < 2.0**53


def mixed(padded: np.ndarray, halo: tuple[int, int, int], corners: bool) -> float:
    call: Any = type("Call", (), {"step": "s", "cycle": 0, "iteration": -1, "shape": (1, 1, 1)})()
    made = Mix("sent", halo, corners, ())({STATE: np.full((1, 1, 1, 1), 7.0), "sent": padded}, call)
    return float(made[STATE][0, 0, 0, 0])


@pytest.mark.parametrize(("corners", "heard"), [(False, 4), (True, 8)])
def test_every_number_received_counts(corners: bool, heard: int) -> None:
    padded = np.arange(5 * 9.0).reshape(5, 3, 3, 1)
    reference = mixed(padded, (1, 1, 0), corners)
    changed = 0
    for place in np.ndindex(3, 3):
        other = padded.copy()
        other[4, place[0], place[1], 0] += 1.0
        changed += place != (1, 1) and mixed(other, (1, 1, 0), corners) != reference
    assert changed == heard


def test_intervals_stand_for_what_was_asked(tmp_path: Path) -> None:
    what = Invention((2, 2), 3, seed=2, sweep=0.001, burn=0.001, solve=0.001)
    result = run(invented(tmp_path, what, dilate=0.5))
    frame = result.record.intervals.table().to_pandas()
    timed = frame[(frame["what"] == "kernel") & (frame["step"] != "dt")]
    assert len(timed) == 3 * 3 * 4
    assert (timed["end_ns"] - timed["start_ns"] >= timed["cpu_ns"]).all()
    assert 0.0004e9 < timed["cpu_ns"].median() < 0.001e9  # half of a millisecond and what is hot


def test_warming_up_does_not_wait(tmp_path: Path) -> None:
    scenario = invented(tmp_path, Invention((2, 2), 1, sweep=100.0, burn=100.0, solve=100.0))
    began = time.perf_counter()
    for limit in (0.0, 60.0):
        assert warm_up(Program(scenario.problem(), scenario.tile), limit) == ""
    assert time.perf_counter() - began < 60.0  # three hundred seconds otherwise


def test_iterations_are_run_as_often_as_recorded(tmp_path: Path) -> None:
    what = Invention((2, 2), 8, seed=3, iterations=3, sweep=0.0, burn=0.0, solve=0.0)
    for lag in (0, 1):
        steps = [{"name": "sweep", "halo": 1}, {"name": "burn"}, {"name": "solve", "halo": 1, "lag": lag}]
        scenario = invented(tmp_path, what, steps=steps)
        result = run(scenario)
        tasks = result.record.tasks.table().to_pandas()
        counts = tasks[(tasks["stage"] == "solve") & ~tasks["skipped"]].groupby("cycle")["iteration"].max() + 1
        kernel: Any = next(s for s in scenario.problem().splitting.steps() if s.name == "solve").kernel
        assert counts.to_list() == (kernel.schedule.iterations + lag).tolist()
        assert len(set(counts)) > 1
