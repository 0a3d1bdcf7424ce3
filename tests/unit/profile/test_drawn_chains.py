"""Runs drawn by hand, with all that can be read off the drawing: accounts, causes, critical chain and factors.

Whole numbers throughout, so that nothing here needs a tolerance.
"""

from __future__ import annotations

from fractions import Fraction
from typing import Any

import pytest

from breakstep.profile.ledger import Ledger
from breakstep.profile.record import RunRecord
from breakstep.profile.run import Profile
from tests.exact import check_exactly
from tests.unit.profile.sketch import accounts, draw, number

Link = tuple[str, str, int, int]


def ledger_of(record: RunRecord) -> Ledger:
    """The ledger of a record, all of whose identities hold."""
    profile = Profile.from_record(record)
    check_exactly(profile)
    return profile.ledger


def causes(ledger: Ledger, letter: str) -> list[tuple[str, str, str, int]]:
    """Account, reason, task and length of each part of the wait before a task, the latest first."""
    parts = ledger.explain(number(letter))
    return [(row.account, row.reason, chr(65 + row.task), row.ns) for row in parts.itertuples()]


def chain(ledger: Ledger) -> list[tuple[Any, ...]]:
    """Letter of each task on the chain, what held it up, and its time in kernels, for bytes, and in the dispatch."""
    rows = ledger.chain.tasks.itertuples()
    return [(chr(65 + r.task), r.via, r.compute + r.stolen, r.transfer, r.engine) for r in rows]


def factors(ledger: Ledger) -> tuple[Fraction, Fraction, Fraction]:
    """Load balance, serialisation and transfer as fractions; their product must be the parallel efficiency."""
    f = ledger.factors
    found = (
        Fraction(f.useful_ns, f.threads * f.busiest_ns),
        Fraction(f.busiest_ns, f.ideal_ns),
        Fraction(f.ideal_ns, f.span_ns),
    )
    assert found[0] * found[1] * found[2] == Fraction(f.useful_ns, f.threads * f.span_ns)
    return found


def test_bytes_from_worker_to_worker() -> None:
    """Each task waits for the bytes of the one before.

    0.0 |AAA.........|
    1.0 |.....BB.....|
    2.0 |..........CC|
    """
    record = draw(test_bytes_from_worker_to_worker.__doc__, "A>B, B>C", arrivals={("A", 1): 5, ("B", 2): 10})
    assert accounts(record) == {"compute": 7, "neighbour": 8, "transfer": 7, "unemployed": 14}
    ledger = ledger_of(record)
    assert causes(ledger, "C") == [
        ("transfer", "under way", "B", 3),
        ("neighbour", "running", "B", 2),
        ("transfer", "under way", "A", 2),
        ("neighbour", "running", "A", 3),
    ]
    assert chain(ledger) == [("C", "data", 2, 3, 0), ("B", "data", 2, 2, 0), ("A", "start", 3, 0, 0)]
    assert factors(ledger) == (Fraction(7, 9), Fraction(3, 7), Fraction(7, 12))


def test_slow_dispatch_at_the_far_end_of_a_chain() -> None:
    """B could start at 1, D at 8: everybody's wait for that is the dispatch's.

    0.0 |A...BB......|
    1.0 |......CC....|
    2.0 |..........DD|
    """
    record = draw(test_slow_dispatch_at_the_far_end_of_a_chain.__doc__, "A>B, B>C, C>D")
    # worker 0: engine 3; worker 1, 0-6: A 1, engine 3, B 2; worker 2, 0-10: the same, C 2, engine 2
    assert accounts(record) == {"compute": 7, "neighbour": 8, "engine": 11, "unemployed": 10}
    ledger = ledger_of(record)
    assert causes(ledger, "D") == [
        ("engine", "ready", "D", 2),
        ("neighbour", "running", "C", 2),
        ("neighbour", "running", "B", 2),
        ("engine", "ready", "B", 3),
        ("neighbour", "running", "A", 1),
    ]
    assert chain(ledger) == [
        ("D", "data", 2, 0, 2),
        ("C", "data", 2, 0, 0),
        ("B", "thread", 2, 0, 3),
        ("A", "start", 1, 0, 0),
    ]
    assert factors(ledger) == (Fraction(7, 9), Fraction(3, 7), Fraction(7, 12))


def test_reduction_at_the_root() -> None:
    """D waits for C, C for the sum R, R for A; the sum's message takes 1.

    0.0 |AAAAArr.......|
    1.0 |BB......CCC...|
    2.0 |...........DDD|
    """
    record = draw(
        test_reduction_at_the_root.__doc__,
        "A>R reduction, B>R reduction, R>C reduction, C>D",
        kinds={"R": "combine"},
        stages={"R": "dt"},
        arrivals={("R", 1): 8},
    )
    # worker 1, 2-8: A 3, R 2 (engine), message 1; worker 2, 0-11: A 5, R 2, message 1, C 3
    found = {"compute": 13, "reduction": 10, "neighbour": 3, "engine": 6, "unemployed": 10}
    assert accounts(record) == found
    ledger = ledger_of(record)
    assert causes(ledger, "D") == [
        ("neighbour", "running", "C", 3),
        ("reduction", "under way", "R", 1),
        ("engine", "running", "R", 2),
        ("reduction", "running", "A", 5),
    ]
    assert chain(ledger) == [
        ("D", "data", 3, 0, 0),
        ("C", "reduction", 3, 1, 0),
        ("R", "thread", 0, 0, 2),
        ("A", "start", 5, 0, 0),
    ]


def test_barrier_before_balanced_work_costs_its_messages_alone() -> None:
    """A and B end together; the release Z runs for 1, and its message to worker 1 takes 1.

    0.0 |AAAAzCCCC.|
    1.0 |BBBB..DDDD|
    """
    record = draw(
        test_barrier_before_balanced_work_costs_its_messages_alone.__doc__,
        "A>Z barrier, B>Z barrier, Z>C barrier, Z>D barrier, A>C, B>D",
        kinds={"Z": "release"},
        arrivals={("Z", 1): 6},
    )
    assert accounts(record) == {"compute": 16, "barrier": 1, "engine": 2, "unemployed": 1}
    ledger = ledger_of(record)
    assert causes(ledger, "D") == [("barrier", "under way", "Z", 1), ("engine", "running", "Z", 1)]
    # of A on Z's thread and B, which end together, the thread's own counts
    assert chain(ledger) == [("D", "barrier", 4, 1, 0), ("Z", "thread", 0, 0, 1), ("A", "start", 4, 0, 0)]
    assert factors(ledger) == (Fraction(1), Fraction(1), Fraction(8, 10))


def test_barrier_before_uneven_work() -> None:
    """D has its data at 2; the barrier Z waits for A, which waits for nobody.

    0.0 |AAAAAAzCC|
    1.0 |BB.....DD|
    """
    record = draw(
        test_barrier_before_uneven_work.__doc__,
        "A>Z barrier, B>Z barrier, Z>C barrier, Z>D barrier, A>C, B>D",
        kinds={"Z": "release"},
    )
    assert accounts(record) == {"compute": 12, "barrier": 4, "engine": 2}
    ledger = ledger_of(record)
    assert causes(ledger, "D") == [("engine", "running", "Z", 1), ("barrier", "running", "A", 4)]
    # C and D end together, and C has the lower number; Z and A precede it on its thread
    assert chain(ledger) == [("C", "thread", 2, 0, 0), ("Z", "thread", 0, 0, 1), ("A", "start", 6, 0, 0)]
    assert factors(ledger) == (Fraction(12, 16), Fraction(1), Fraction(8, 9))


def test_idle_threads_without_work() -> None:
    """The second thread never has a task, the third stops at 3: that is no wait, and nobody is its cause.

    0.0 |AAAAAA|
    0.1 |......|
    1.0 |BBB...|
    """
    record = draw(test_idle_threads_without_work.__doc__)
    assert accounts(record) == {"compute": 9, "unemployed": 9}
    ledger = ledger_of(record)
    assert ledger.gaps.empty
    assert chain(ledger) == [("A", "start", 6, 0, 0)]
    assert factors(ledger) == (Fraction(9, 18), Fraction(1), Fraction(1))


def test_gap_that_the_dispatch_itself_ends() -> None:
    """The idle thread waits for A in order to add it up: what ends the gap is a reduction's own task.

    0.0 |AAAAAA..|
    1.0 |BB....rr|
    """
    record = draw(
        test_gap_that_the_dispatch_itself_ends.__doc__, "A>R reduction, B>R reduction", kinds={"R": "combine"}
    )
    assert accounts(record) == {"compute": 8, "reduction": 4, "engine": 2, "unemployed": 2}
    ledger = ledger_of(record)
    assert causes(ledger, "R") == [("reduction", "running", "A", 4)]
    assert chain(ledger) == [("R", "reduction", 0, 0, 2), ("A", "start", 6, 0, 0)]


def test_causes_across_three_workers() -> None:
    """D waits for F, which is ready at 2 and queued behind E; E waits for A on a third worker.

    0.0 |AAAA.......|
    1.0 |BB..EEEFF..|
    2.0 |CC.......DD|
    """
    record = draw(test_causes_across_three_workers.__doc__, "A>E, B>F, F>D, C>D")
    # worker 1, 2-4: A; worker 2, 2-9: F was ready and its thread idle 2-4, busy with E 4-7, then F itself
    assert accounts(record) == {"compute": 15, "neighbour": 7, "engine": 2, "unemployed": 9}
    ledger = ledger_of(record)
    assert causes(ledger, "E") == [("neighbour", "running", "A", 2)]
    assert causes(ledger, "D") == [
        ("neighbour", "running", "F", 2),
        ("neighbour", "queued", "F", 3),
        ("engine", "ready", "F", 2),
    ]
    assert chain(ledger) == [
        ("D", "data", 2, 0, 0),
        ("F", "thread", 2, 0, 0),
        ("E", "data", 3, 0, 0),
        ("A", "start", 4, 0, 0),
    ]
    assert factors(ledger) == (Fraction(15, 21), Fraction(7, 11), Fraction(1))


def test_stolen_time_is_no_physics() -> None:
    """A's kernel had a processor for 4 of its 6; the wait for it stays the neighbour's.

    0.0 |AAAAAA..|
    1.0 |BB....CC|
    """
    record = draw(test_stolen_time_is_no_physics.__doc__, "A>C, B>C", cpu={"A": 4})
    assert accounts(record) == {"compute": 8, "stolen": 2, "neighbour": 4, "unemployed": 2}
    found = ledger_of(record).chain
    assert found.accounts_ns == {"compute": 6, "stolen": 2, "transfer": 0, "engine": 0}
    assert found.by_step.loc["work"].to_dict() == found.accounts_ns


def test_a_kernel_with_threads_of_its_own_steals_nothing() -> None:
    """A used 9 of processor time in 6.

    0.0 |AAAAAA|
    """
    record = draw(test_a_kernel_with_threads_of_its_own_steals_nothing.__doc__, cpu={"A": 9})
    assert accounts(record) == {"compute": 6}


@pytest.mark.parametrize(("timed", "stolen"), [(["sleep"], 1), (["sleep", "work"], 0), ([], 7)])
def test_a_timed_step_needs_no_processor(timed: list[str], stolen: int) -> None:
    """A waits for a set time; B computes, with a processor for 3 of its 4.

    0.0 |AAAAAA|
    1.0 |BBBB..|
    """
    text = test_a_timed_step_needs_no_processor.__doc__
    record = draw(text, stages={"A": "sleep"}, cpu={"A": 0, "B": 3})
    record.manifest["timed_steps"] = timed
    booked = ledger_of(record).accounts_ns
    assert (booked["stolen"], booked["compute"]) == (stolen, 10 - stolen)


def test_the_ideal_replay_keeps_the_recorded_order() -> None:
    """C needs B, which ran after A. With B first an ideal run would take 6; in the order recorded it takes 10.

    0.0 |AAAABB......|
    1.0 |........CCCC|
    """
    record = draw(test_the_ideal_replay_keeps_the_recorded_order.__doc__, "B>C", arrivals={("B", 1): 7})
    ledger = ledger_of(record)
    assert ledger.factors.ideal_ns == 10
    assert factors(ledger) == (Fraction(10, 12), Fraction(6, 10), Fraction(10, 12))
    assert chain(ledger) == [("C", "data", 4, 1, 1), ("B", "thread", 2, 0, 0), ("A", "start", 4, 0, 0)]


def test_the_ideal_replay_takes_neither_ghost_zones_nor_dispatch_into_account() -> None:
    """Of A 2 is ghost zones and 1 bookkeeping; the sum R costs 2. Kernels alone: A 3, then B 2.

    0.0 |AAAAAarr..|
    1.0 |........BB|
    """
    text = test_the_ideal_replay_takes_neither_ghost_zones_nor_dispatch_into_account.__doc__
    record = draw(text, "A>R reduction, R>B reduction", kinds={"R": "combine"}, halo={"A": 2})
    ledger = ledger_of(record)
    assert factors(ledger) == (Fraction(5, 6), Fraction(3, 5), Fraction(5, 10))
    assert chain(ledger) == [("B", "reduction", 2, 0, 0), ("R", "thread", 0, 0, 2), ("A", "start", 3, 2, 1)]
    assert ledger.chain.by_step.loc["work"].to_dict() == {"compute": 5, "stolen": 0, "transfer": 2, "engine": 3}


def test_chain_that_begins_late() -> None:
    """B waits for nothing and starts at 3: until then the dispatch was at work.

    0.0 |AA......|
    1.0 |...BBBBB|
    """
    ledger = ledger_of(draw(test_chain_that_begins_late.__doc__))
    assert chain(ledger) == [("B", "start", 5, 0, 3)]
    assert causes(ledger, "B") == [("engine", "ready", "B", 3)]


def test_rims_that_are_cut_by_a_task_of_their_own() -> None:
    """P cuts A's rims, which come at 8.

    0.0 |AAAAPP....|
    1.0 |BB......CC|
    """
    record = draw(
        test_rims_that_are_cut_by_a_task_of_their_own.__doc__,
        "A>P, P>C, B>C",
        kinds={"P": "pack"},
        arrivals={("P", 1): 8},
    )
    ledger = ledger_of(record)
    assert causes(ledger, "C") == [
        ("transfer", "under way", "P", 2),
        ("transfer", "running", "P", 2),
        ("neighbour", "running", "A", 2),
    ]
    assert chain(ledger) == [("C", "data", 2, 2, 0), ("P", "thread", 0, 2, 0), ("A", "start", 4, 0, 0)]
    assert ledger.chain.tasks["flight_ns"].tolist() == [2, 0, 0]


def test_clocks_that_disagree_leave_the_chain_exact() -> None:
    """C seems to start at 4 before its input A ends at 6: the chain takes A for no longer than up to 4.

    0.0 |AAAAAA..|
    1.0 |BB..CCCC|
    """
    ledger = ledger_of(draw(test_clocks_that_disagree_leave_the_chain_exact.__doc__, "A>C, B>C"))
    assert chain(ledger) == [("C", "data", 4, 0, 0), ("A", "start", 4, 0, 0)]
    assert ledger.factors.ideal_ns == 10  # A, then C, as the graph demands: longer than the 8 that the clocks show


def test_tasks_whose_threads_contradict_their_edges_have_no_ideal_replay() -> None:
    """B needs C, and A needs D, although each comes later on the other's thread.

    0.0 |AABB|
    1.0 |CCDD|
    """
    text = test_tasks_whose_threads_contradict_their_edges_have_no_ideal_replay.__doc__
    ledger = Profile.from_record(draw(text, "B>C, D>A")).ledger
    assert ledger.factors.ideal_ns == 0
    assert ledger.chain.span_ns == ledger.span_ns == 4
