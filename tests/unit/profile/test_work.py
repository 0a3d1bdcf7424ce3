"""Kernel time by step, and how unevenly it is spread."""

from __future__ import annotations

import pytest

from breakstep.profile.record import RunRecord
from breakstep.profile.run import Profile
from tests.unit.profile.sketch import manifest

EXACT = 1e-14  # quotients of small integers: a few roundings


def moving_spot(cycles: int = 4) -> RunRecord:
    """Two workers with a tile each: "burn" costs 30 on worker cycle mod 2, else 10; "sweep" costs 5."""
    record = RunRecord()
    record.threads.extend([(0, 0), (1, 0)])
    task = 0
    for cycle in range(cycles):
        for worker in (0, 1):
            start, cost = 100 * cycle, 30 if cycle % 2 == worker else 10
            row = (task, "step", "sweep+burn", worker, cycle, -1, worker, 0, start, start + 40, 0, False)
            record.tasks.append(row)
            record.intervals.append((task, "halo", "sweep", start, start + 2, 2))
            record.intervals.append((task, "kernel", "sweep", start + 2, start + 7, 4))
            record.intervals.append((task, "kernel", "burn", start + 7, start + 7 + cost, cost))
            record.counters.append((task, "burn", "sub_steps", cost))
            record.counters.append((task, "burn", "zones", 1))
            task += 1
    record.manifest = manifest(2, 2, tiles=2)
    return record


def test_work_by_step() -> None:
    work = Profile.from_record(moving_spot()).work
    assert work["compute_ns"].to_dict() == {"burn": 160, "sweep": 40}
    assert work["cpu_ns"].to_dict() == {"burn": 160, "sweep": 32}
    assert work["kernels"].to_dict() == {"burn": 8, "sweep": 8}
    assert work.loc["burn", "compute_seconds"] == pytest.approx(160e-9, rel=EXACT)


def test_a_moving_hot_spot_shows_in_phases_and_not_over_the_run() -> None:
    imbalance = Profile.from_record(moving_spot()).imbalance
    assert imbalance.loc["burn"].to_dict() == pytest.approx(
        {"workers": 1.0, "tiles": 1.0, "phases": 1.5, "phases_weighted": 1.5}, rel=EXACT
    )
    assert imbalance.loc["sweep"].to_dict() == pytest.approx(dict.fromkeys(imbalance.columns, 1.0), rel=EXACT)


def test_idle_workers_and_tiles_count_in_the_mean() -> None:
    """One cycle of the same on four workers and with eight tiles: two of each have all the work."""
    record = moving_spot(1)
    record.threads.extend([(2, 0), (3, 0)])
    record.manifest = manifest(4, 4, tiles=8)
    imbalance = Profile.from_record(record).imbalance
    assert imbalance.loc["burn", "workers"] == pytest.approx(30 / (40 / 4), rel=EXACT)
    assert imbalance.loc["burn", "tiles"] == pytest.approx(30 / (40 / 8), rel=EXACT)
    assert imbalance.loc["burn", "phases"] == pytest.approx(3.0, rel=EXACT)


def test_phases_are_weighted_by_work_only_where_that_is_said() -> None:
    """Phase one: 30 and 10, ratio 1.5; phase two: 5 and 5, ratio 1. Weighted: 35 over 25."""
    record = moving_spot(1)
    for task, worker in ((10, 0), (11, 1)):
        record.tasks.append((task, "step", "burn", worker, 1, -1, worker, 0, 100, 140, 0, False))
        record.intervals.append((task, "kernel", "burn", 100, 105, 5))
    imbalance = Profile.from_record(record).imbalance
    assert imbalance.loc["burn", "phases"] == pytest.approx(1.25, rel=EXACT)
    assert imbalance.loc["burn", "phases_weighted"] == pytest.approx(35 / 25, rel=EXACT)


def test_counters_by_step() -> None:
    counters = Profile.from_record(moving_spot()).counters_by_step
    assert counters.values.tolist() == [["burn", "sub_steps", 160], ["burn", "zones", 8]]


def test_run_without_kernels() -> None:
    record = RunRecord()
    record.threads.append((0, 0))
    record.manifest = manifest(1, 1, tiles=1)
    profile = Profile.from_record(record)
    assert len(profile.work) == len(profile.imbalance) == len(profile.counters_by_step) == 0
