"""The record of a run that lost a worker can be accounted for."""

from __future__ import annotations

from breakstep.engine.unfinished import tidy
from breakstep.profile.record import RunRecord
from breakstep.profile.run import Profile
from tests.unit.profile.sketch import draw


def failed(record: RunRecord, workers: int, threads: int) -> Profile:
    """The profile of the record, as of a failed run."""
    tidy(record, workers, threads)
    record.manifest.update(status="failed", workers=workers, threads=workers * threads)
    return Profile.from_record(record)


def test_threads_of_a_lost_worker_are_listed() -> None:
    profile = failed(draw("0.0 |AAAA|\n0.1 |BB..|"), workers=3, threads=2)
    listed = [tuple(row) for row in profile.threads[["worker", "thread"]].to_numpy()]
    assert sorted(listed) == [(worker, thread) for worker in range(3) for thread in range(2)]
    assert profile.ledger.accounts_ns["unemployed"] == 2 + 4 * 4


def test_a_task_that_ran_twice_counts_once() -> None:
    """B ran on worker 0, then once more on worker 1, from 6 to 8; worker 2 is lost."""
    record = draw("0.0 |AABB....|\n1.0 |CC......|", "A>B")
    record.tasks.append((1, "step", "work", 1, 0, -1, 1, 0, 6, 8, 0, False))
    record.intervals.append((1, "kernel", "work", 6, 8, 2))
    record.counters.extend([(0, "work", "zones", 5), (1, "work", "zones", 5), (1, "work", "zones", 5)])
    profile = failed(record, workers=3, threads=1)
    assert profile.tasks["task"].tolist() == [0, 1, 2]
    assert profile.tasks.set_index("task")["worker"].to_dict() == {0: 0, 1: 0, 2: 1}
    assert profile.ledger.accounts_ns["compute"] == 6
    assert profile.ledger.closure_error == 0.0
    assert profile.counters_by_step["value"].tolist() == [10]


def test_a_sound_record_stays_as_it_is() -> None:
    record = draw("0.0 |AABB|\n1.0 |CC..|", "A>B")
    before = {name: table.to_pylist() for name, table in record.tables().items()}
    tidy(record, workers=2, threads=1)
    assert {name: table.to_pylist() for name, table in record.tables().items()} == before


def test_a_record_without_anything() -> None:
    profile = failed(draw(None), workers=2, threads=1)
    assert (len(profile.tasks), len(profile.threads)) == (0, 2)
