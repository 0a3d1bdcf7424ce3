"""A recorded run, lifted and played on the machine of recording, takes the time that was recorded."""

from __future__ import annotations

import numpy as np
import pytest

from breakstep.forecast.answer import answer, kinds_of, recorded_errors
from breakstep.forecast.basis import basis_of
from breakstep.forecast.fixed import recorded_schedule, replay_fixed
from breakstep.forecast.question import Question, parse_question
from breakstep.forecast.scene import Scene
from breakstep.forecast.setting import recorded_machine
from breakstep.profile.run import Profile
from tests.unit.forecast.recorded import MS, Ring, Stage, even, hot

#: With one worker nothing but rounding to whole nanoseconds is left. With more, crowding is taken out of the record and
#: put back in four rounds, each of which gains a digit, and a run's first gap is in the makespan but not in the span.
ROUNDING, ROUNDS_LEFT = 20, 3e-3


@pytest.mark.parametrize("phases", [even(), hot(), hot(24)], ids=["even", "hot", "long"])
@pytest.mark.parametrize("workers", [1, 2, 4])
def test_lockstep_takes_what_was_recorded(phases: list[Stage], workers: int) -> None:
    """Gaps, turns and durations are constants here, so the model has no excuse."""
    profile = Ring(phases, workers).profile()
    basis = basis_of([profile])
    scene = Scene.of(basis, recorded_machine(basis.first), Question(), workers)
    found = scene.expected_ns(kinds_of(scene, "lockstep"))
    span = profile.ledger.span_ns
    allowed = ROUNDING * len(phases) if workers == 1 else ROUNDS_LEFT * span
    assert found - scene.setting.model.overhead_ns == pytest.approx(span, abs=allowed)


def test_the_recorded_order_takes_what_was_recorded() -> None:
    basis = basis_of([Ring(hot(24)).profile()])
    run = basis.first
    scene = Scene.of(basis, recorded_machine(run), Question(), 2)
    graph, steps = scene.graph(scene.unfolded.lockstep), scene.unfolded.steps
    slot = np.full(graph.tasks, -1, dtype=np.int32)
    start, finish = np.zeros(graph.tasks, dtype=np.int64), np.zeros(graph.tasks, dtype=np.int64)
    slot[steps] = run.worker.reshape(-1)
    start[steps], finish[steps] = run.start.reshape(-1), run.end.reshape(-1)
    schedule = recorded_schedule(graph, slot, start, finish)
    found = replay_fixed(graph, scene.setting.model, schedule, scene.unfolded.lockstep).makespan_ns
    assert found - scene.setting.model.overhead_ns == pytest.approx(run.span_ns, rel=ROUNDS_LEFT)


def test_keeping_the_order_never_takes_longer_without_barriers() -> None:
    basis = basis_of([Ring(hot(24)).profile()])
    scene = Scene.of(basis, recorded_machine(basis.first), Question(), 2)
    lockstep, tasked = scene.unfolded.lockstep, scene.unfolded.tasked
    assert scene.kept_ns(lockstep, tasked) < scene.expected_ns(lockstep)


def test_bounds_hold_and_one_worker_takes_the_area() -> None:
    basis = basis_of([Ring(hot(24)).profile()])
    rows = answer(basis, recorded_machine(basis.first), Question(), [1, 2, 4, 8])["rows"]
    for row in rows:
        highest = max(row["area_bound_s"], row["path_bound_s"], row["worker_bound_s"])
        assert highest <= row["tasked_s"] * (1 + 1e-9)
        assert row["tasked_s"] < row["lockstep_s"]
        assert 0.0 < row["tasked_efficiency"] <= 1.0
    assert rows[0]["tasked_s"] == pytest.approx(rows[0]["area_bound_s"])


def test_what_is_out_of_reach_stays_so_in_both_modes_and_more_workers_never_raise_it() -> None:
    """Messages take far longer than tasks here, so that the longest path with them rises with the workers."""
    basis = basis_of([Ring(hot(24)).profile()])
    question = parse_question(["latency=1e4"], basis.program)
    rows = answer(basis, recorded_machine(basis.first), question, [1, 2, 4, 8, 64])["rows"]
    least = [row["least_s"] for row in rows]
    assert least == sorted(least, reverse=True)
    assert rows[1]["path_bound_s"] > 1.2 * rows[0]["path_bound_s"]
    for row in rows:
        reached = min(row["lockstep_s"], row["tasked_s"], row["tasked_fixed_s"])
        assert 0.0 < row["least_s"] <= reached * (1 + 1e-9)


@pytest.mark.parametrize("tiles", [1, 4])
@pytest.mark.parametrize("workers", [1, 2, 8])
def test_bounds_hold_for_a_mesh_that_grows(tiles: int, workers: int) -> None:
    """Few tiles do not reach the hot one of the record, which must not bound them. Nothing here is drawn but ones."""
    phases = [Stage("burn", [MS] * 7 + [20 * MS], cycle) for cycle in range(4)]
    basis = basis_of([Ring(phases).profile()])
    question = parse_question([f"weak={tiles}"], basis.program)
    row = answer(basis, recorded_machine(basis.first), question, [workers])["rows"][0]
    highest = max(row["area_bound_s"], row["path_bound_s"], row["worker_bound_s"])
    assert 0.0 < highest <= min(row["tasked_s"], row["lockstep_s"]) * (1 + 1e-9)


def test_workers_beyond_the_tiles_have_nothing_to_do() -> None:
    basis = basis_of([Ring(even()).profile()])
    eight, many = answer(basis, recorded_machine(basis.first), Question(), [8, 64])["rows"]
    assert many["busy_workers"] == 8
    assert many["tasked_s"] == eight["tasked_s"]
    assert many["tasked_efficiency"] == pytest.approx(eight["tasked_efficiency"] / 8)


def test_a_step_ten_times_as_costly_takes_ten_times_as_long_on_one_worker() -> None:
    basis = basis_of([Ring([Stage("burn", [9_000_000] * 4, neighbours=False)], workers=1).profile()])
    machine = recorded_machine(basis.first)
    plain, dear = (Scene.of(basis, machine, parse_question(asked, basis.program), 1) for asked in ([], ["burn=10x"]))
    more = dear.expected_ns(dear.unfolded.tasked) - plain.expected_ns(plain.unfolded.tasked)
    assert more == pytest.approx(9 * 4 * 9_000_000)


def test_the_error_is_that_of_the_median_run() -> None:
    runs = [Ring(even(cost=cost)).profile() for cost in (5_000_000, 5_100_000, 5_600_000)]
    found = recorded_errors(basis_of(runs))["lockstep"]
    assert found["measured_s"] == pytest.approx(runs[1].ledger.span_ns * 1e-9)
    assert found["error"] == pytest.approx(found["forecast_s"] / found["measured_s"] - 1.0)
    assert found["runs"] == 3


def test_identical_repeats_leave_the_interval_without_width() -> None:
    """Intervals of identical repeats have no width."""
    basis = basis_of([Ring(hot()).profile(), Ring(hot()).profile()])
    found = answer(basis, recorded_machine(basis.first), Question(), [2])
    assert found["rows"][0]["lockstep_high_s"] - found["rows"][0]["lockstep_low_s"] < 1e-6
    assert found["notes"] == []


def test_a_single_run_cannot_say_how_runs_differ_and_says_so() -> None:
    basis = basis_of([Ring(hot()).profile()])
    (note,) = answer(basis, recorded_machine(basis.first), Question(), [2])["notes"]
    assert "No mode was recorded twice" in note


def test_stretched_waits_of_a_rehearsal_are_taken_back_and_put_in_again() -> None:
    """Forecasts speak of the code that is rehearsed; the comparison with the rehearsal speaks of the rehearsal."""
    record = Ring(hot(12), 1).record()
    record.manifest |= {"timed_steps": ["s0", "s1", "s2"], "dilate": 4.0}
    profile = Profile.from_record(record)
    basis = basis_of([profile])
    kernels = sum(basis.first.costs.kernel.values())
    assert np.array_equal(kernels, np.array([phase.costs for phase in hot(12)]) // 4)
    found = recorded_errors(basis)["lockstep"]
    assert found["measured_s"] == pytest.approx(profile.ledger.span_ns * 1e-9)
    assert abs(found["error"]) < ROUNDS_LEFT
    (row,) = answer(basis, recorded_machine(basis.first), Question(), [1])["rows"]
    assert row["lockstep_s"] < 0.5 * found["measured_s"]
