"""The critical chain and the ideal replay of random runs, each against a second statement in plain Python.

The sums are checked by :mod:`tests.exact` for every run; here it is checked that the chain is one that the run had:
each link is what held the task up longest, and the ideal run is the longest path through kernels.
"""

from __future__ import annotations

from hypothesis import given, settings
from hypothesis import strategies as st

from breakstep.profile.ledger import Ledger
from breakstep.profile.run import Profile
from tests.exact import check_exactly
from tests.property.test_ledger import DrawnRun, DrawnTask, arrival, record_of, runs


def before_on_thread(run: DrawnRun, task: DrawnTask) -> DrawnTask | None:
    """The task that its thread ran before."""
    own = sorted((t for t in run.tasks if t.place == task.place), key=lambda t: (t.start, t.end, t.number))
    place = own.index(task)
    return own[place - 1] if place else None


def holders(run: DrawnRun, task: DrawnTask) -> list[tuple[int, str, int]]:
    """All that held a task up: moment, word, and number of the task behind it."""
    found = [(arrival(source, task), kind, source.number) for source, kind in task.inputs]
    previous = before_on_thread(run, task)
    return found if previous is None else [*found, (previous.end, "thread", previous.number)]


def ledger_of(run: DrawnRun) -> Ledger:
    profile = Profile.from_record(record_of(run))
    check_exactly(profile)
    return profile.ledger


def ideal(run: DrawnRun) -> int:
    """Longest path through kernels along inputs and threads; 0 where these form a ring.

    They can, since tasks without length that share a moment count in the order of their numbers on their thread.
    """
    done: dict[int, int] = {}
    left = list(run.tasks)
    while left:
        ready = [t for t in left if all(source.number in done for source in sources(run, t))]
        if not ready:
            return 0
        for task in ready:
            done[task.number] = task.inside[1] + max((done[s.number] for s in sources(run, task)), default=0)
        left = [t for t in left if t.number not in done]
    return max(done.values(), default=0)


def sources(run: DrawnRun, task: DrawnTask) -> list[DrawnTask]:
    """All tasks that must be done before."""
    previous = before_on_thread(run, task)
    return [*(source for source, _ in task.inputs), *([] if previous is None else [previous])]


def lengths(run: DrawnRun) -> bool:
    """Whether every task takes time, so that no two of a thread share a moment."""
    return bool(run.tasks) and all(sum(task.inside) for task in run.tasks)


@settings(max_examples=100, deadline=None)
@given(runs().filter(lengths))
def test_every_link_is_what_held_the_task_up_longest(run: DrawnRun) -> None:
    tasks = {task.number: task for task in run.tasks}
    rows = ledger_of(run).chain.tasks.to_dict("records")
    for row, earlier in zip(rows, [*rows[1:], None], strict=True):
        task = tasks[row["task"]]
        found = holders(run, task)
        assert row["end_ns"] == task.end
        assert (row["compute"], row["stolen"]) == (task.inside[1] - task.stolen, task.stolen)
        if earlier is None:
            assert (row["via"], found) == ("start", [])
            continue
        ready = max(moment for moment, _, _ in found)
        assert (ready, row["via"], earlier["task"]) in found
        assert row["flight_ns"] == ready - tasks[earlier["task"]].end
        assert row["engine"] == task.start - ready + task.inside[2]
        if any(entry[:2] == (ready, "thread") for entry in found):
            assert row["via"] == "thread"


@settings(max_examples=100, deadline=None)
@given(runs())
def test_the_ideal_run_is_the_longest_path_and_no_longer_than_the_real_one(run: DrawnRun) -> None:
    ledger = ledger_of(run)
    assert ledger.factors.ideal_ns == ideal(run) <= ledger.span_ns


@settings(max_examples=60, deadline=None)
@given(runs(skewed=True))
def test_clocks_that_disagree_change_no_ideal_run(run: DrawnRun) -> None:
    """Durations and orders are what they were; only moments differ from worker to worker."""
    assert ledger_of(run).factors.ideal_ns == ideal(run)


@settings(max_examples=60, deadline=None)
@given(runs(), st.data())
def test_any_wait_can_be_asked_for_and_adds_up(run: DrawnRun, data: st.DataObject) -> None:
    if not run.tasks:
        return
    task = data.draw(st.sampled_from(run.tasks))
    profile = Profile.from_record(record_of(run))
    found = profile.why(step=f"stage of {task.kind}")
    gaps = profile.ledger.gaps
    kinds = {t.number: t.kind for t in run.tasks}
    waits = [g["end_ns"] - g["start_ns"] for g in gaps.to_dict("records") if kinds[g["task"]] == task.kind]
    assert found.wait_ns == found.parts["ns"].sum() == max(waits, default=0)
