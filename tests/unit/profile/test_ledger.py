"""The ledger on runs drawn by hand, whose accounts can be counted off the drawing."""

from __future__ import annotations

import pytest

from breakstep.profile.run import Profile
from tests.unit.profile.sketch import accounts, draw, number


def test_compute_only() -> None:
    """Two threads in kernels from start to end.

    0.0 |AAAA|
    0.1 |BBBB|
    """
    assert accounts(draw(test_compute_only.__doc__)) == {"compute": 8}


def test_time_in_a_task_outside_its_kernel_is_engine_and_halo_is_transfer() -> None:
    """Two nanoseconds of ghost zones, then the kernel, then bookkeeping.

    0.0 |AAAAAaa|
    """
    text = test_time_in_a_task_outside_its_kernel_is_engine_and_halo_is_transfer.__doc__
    assert accounts(draw(text, halo={"A": 2})) == {"transfer": 2, "compute": 3, "engine": 2}


def test_neighbour_wait() -> None:
    """C needs A, which is still running.

    0.0 |AAAAAA..|
    1.0 |BB....CC|
    """
    found = accounts(draw(test_neighbour_wait.__doc__, "A>C, B>C"))
    assert found == {"compute": 10, "neighbour": 4, "unemployed": 2}


def test_transfer_wait() -> None:
    """A is done at 4, its bytes come at 7.

    0.0 |AAAA.....|
    1.0 |BB.....CC|
    """
    found = accounts(draw(test_transfer_wait.__doc__, "A>C, B>C", arrivals={("A", 1): 7}))
    assert found == {"compute": 8, "neighbour": 2, "transfer": 3, "unemployed": 5}


def test_the_last_of_several_transfers_counts_and_only_to_the_waiting_worker() -> None:
    """A's fields come at 5 and at 6 on worker 1; what comes to worker 2 at 8 is of no concern.

    0.0 |AAAA....|
    1.0 |BB....CC|
    2.0 |DDDDDDDD|
    """
    text = test_the_last_of_several_transfers_counts_and_only_to_the_waiting_worker.__doc__
    record = draw(text, "A>C, B>C", arrivals={("A", 1): 5, ("A", 2): 8})
    record.transfers.append((0, "u", 0, 1, 80, 1, 1, 4, 6))
    assert accounts(record) == {"compute": 16, "neighbour": 2, "transfer": 2, "unemployed": 4}


def test_latency_after_everything_is_ready_is_engine() -> None:
    """A's bytes come at 5, but C starts at 8.

    0.0 |AAAA......|
    1.0 |BB......CC|
    """
    text = test_latency_after_everything_is_ready_is_engine.__doc__
    found = accounts(draw(text, "A>C, B>C", arrivals={("A", 1): 5}))
    assert found == {"compute": 8, "neighbour": 2, "transfer": 1, "engine": 3, "unemployed": 6}


def test_handover_on_one_worker_is_engine_and_not_transfer() -> None:
    """A ends at 4 on the other thread of C's worker, and C starts at 6.

    0.0 |AAAA....|
    0.1 |BB....CC|
    """
    found = accounts(draw(test_handover_on_one_worker_is_engine_and_not_transfer.__doc__, "A>C, B>C"))
    assert found == {"compute": 8, "neighbour": 2, "engine": 2, "unemployed": 4}


def test_reduction_wait() -> None:
    """R adds up what A and B give; C uses the sum. While R itself runs, the engine is at work.

    0.0 |AAAAAArr..|
    1.0 |BB......CC|
    """
    record = draw(
        test_reduction_wait.__doc__,
        "A>R reduction, B>R reduction, R>C reduction, B>C",
        kinds={"R": "combine"},
        stages={"R": "dt"},
    )
    # gap of worker 1: A runs 2-6, R 6-8; inside R again 2
    assert accounts(record) == {"compute": 10, "reduction": 4, "engine": 4, "unemployed": 2}


def test_a_wait_for_a_reduction_s_own_function() -> None:
    """As above, but R runs a kernel: a function of the user's, for which worker 1 then waits.

    0.0 |AAAAAARR..|
    1.0 |BB......CC|
    """
    record = draw(
        test_a_wait_for_a_reduction_s_own_function.__doc__,
        "A>R reduction, B>R reduction, R>C reduction, B>C",
        kinds={"R": "combine"},
        stages={"R": "dt"},
    )
    record.intervals.append((number("R"), "kernel", "dt", 6, 8, 2))
    # gap of worker 1: A runs 2-6, R 6-8
    assert accounts(record) == {"compute": 12, "reduction": 6, "unemployed": 2}


def test_barrier_wait() -> None:
    """C has its data at 2 and waits for the barrier (counters X and Y, release Z) that A is late for.

    0.0 |AAAAAxzDD|
    1.0 |BBy....CC|
    """
    record = draw(
        test_barrier_wait.__doc__,
        "A>X barrier, B>Y barrier, X>Z barrier, Y>Z barrier, Z>C barrier, Z>D barrier, B>C, A>D",
        kinds={"X": "count", "Y": "count", "Z": "release"},
    )
    # gap of worker 1: A runs 3-5, X and Z 5-7; inside x, y, z again 3
    assert accounts(record) == {"compute": 11, "barrier": 2, "engine": 5}


def test_barrier_with_late_data_is_split_where_the_data_are_there() -> None:
    """C's data come from A at 4, the barrier Z goes up at 7 because of D.

    0.0 |AAAA.....|
    1.0 |DDDDDDz..|
    2.0 |BB.....CC|
    """
    record = draw(
        test_barrier_with_late_data_is_split_where_the_data_are_there.__doc__,
        "A>C, B>C, A>Z barrier, B>Z barrier, D>Z barrier, Z>C barrier",
        kinds={"Z": "release"},
    )
    # worker 2: neighbour A 2-4, barrier on D 4-6, Z runs 6-7
    found = {"compute": 14, "neighbour": 2, "barrier": 2, "engine": 2, "unemployed": 7}
    assert accounts(record) == found


def test_barrier_that_comes_with_the_data_loses_the_tie() -> None:
    """Data from A and the barrier from D both come at 6: the wait is a neighbour's.

    0.0 |AAAAAA..|
    1.0 |DDDDDD..|
    2.0 |BB....CC|
    """
    text = test_barrier_that_comes_with_the_data_loses_the_tie.__doc__
    found = accounts(draw(text, "A>C, B>C, D>C barrier"))
    assert found == {"compute": 16, "neighbour": 4, "unemployed": 4}


def test_lowest_task_wins_a_tie_of_arrival() -> None:
    """Data from A (packing) and from D (a step) come at 6; A has the lower number, so it is a transfer.

    0.0 |AAAAAA..|
    1.0 |DDDDDD..|
    2.0 |BB....CC|
    """
    record = draw(test_lowest_task_wins_a_tie_of_arrival.__doc__, "D>C, A>C", kinds={"A": "pack"})
    assert accounts(record) == {"compute": 10, "transfer": 10, "unemployed": 4}


def test_unemployed_tail_and_unemployed_thread() -> None:
    """Worker 0 is done at 3, and its second thread never has a task.

    0.0 |AAA.....|
    0.1 |........|
    1.0 |BBBBBBBB|
    """
    found = accounts(draw(test_unemployed_tail_and_unemployed_thread.__doc__))
    assert found == {"compute": 11, "unemployed": 13}


def test_wait_before_a_first_task() -> None:
    """Worker 1 has nothing to do before A is done.

    0.0 |AAAA..|
    1.0 |....BB|
    """
    found = accounts(draw(test_wait_before_a_first_task.__doc__, "A>B"))
    assert found == {"compute": 6, "neighbour": 4, "unemployed": 2}


def test_producer_running_something_else_first() -> None:
    """D needs B, which is ready all along but queued behind A: still a wait for the neighbour.

    0.0 |AAAABB..|
    1.0 |CC....DD|
    """
    found = accounts(draw(test_producer_running_something_else_first.__doc__, "B>D, C>D"))
    assert found == {"compute": 10, "neighbour": 4, "unemployed": 2}


def test_producer_idle_because_of_the_engine() -> None:
    """B could start at 2 and starts at 4: both threads' wait until then is the engine's.

    0.0 |AA..BB..|
    1.0 |CC....DD|
    """
    found = accounts(draw(test_producer_idle_because_of_the_engine.__doc__, "A>B, B>D, C>D"))
    assert found == {"compute": 8, "neighbour": 2, "engine": 4, "unemployed": 2}


def test_producer_ready_on_a_thread_that_is_partly_busy() -> None:
    """E needs B; B is ready at 0, its thread runs A from 3 to 5 and idles at 2 and from 5 to 7.

    0.0 |DD.AA..BB..|
    1.0 |CC.......EE|
    """
    found = accounts(draw(test_producer_ready_on_a_thread_that_is_partly_busy.__doc__, "B>E, C>E"))
    # worker 0: 3 of engine; worker 1, from 2 to 9: B runs 2, queued behind A 2, engine 3
    assert found == {"compute": 10, "neighbour": 4, "engine": 6, "unemployed": 2}


def test_producer_waiting_for_a_reduction() -> None:
    """D waits for its neighbour E, which waits for the reduction R, which waits for A.

    0.0 |AAAAr....|
    1.0 |BB...EE..|
    2.0 |CC.....DD|
    """
    record = draw(
        test_producer_waiting_for_a_reduction.__doc__,
        "A>R reduction, R>E reduction, B>E, E>D, C>D",
        kinds={"R": "combine"},
    )
    # worker 1: reduction 2-4, R 4-5; worker 2: the same, then neighbour 5-7; and R itself
    found = {"compute": 12, "reduction": 4, "neighbour": 2, "engine": 3, "unemployed": 6}
    assert accounts(record) == found


def test_a_deeper_data_edge_leaves_a_barrier_wait_as_it_is() -> None:
    """D waits behind the barrier Z for E, and E for its neighbour A: it is the barrier that makes D wait.

    0.0 |AAAA......|
    1.0 |BB..EEz...|
    2.0 |CC.....DDD|
    """
    record = draw(
        test_a_deeper_data_edge_leaves_a_barrier_wait_as_it_is.__doc__,
        "A>E, B>E, E>Z barrier, C>Z barrier, Z>D barrier, C>D",
        kinds={"Z": "release"},
    )
    # worker 1: neighbour 2-4; worker 2: barrier 2-6, Z runs 6-7
    found = {"compute": 13, "neighbour": 2, "barrier": 4, "engine": 2, "unemployed": 9}
    assert accounts(record) == found


def test_packing_and_waiting_for_it_is_transfer() -> None:
    """P cuts A's rims; they come at 8.

    0.0 |AAAAPP....|
    1.0 |BB......CC|
    """
    record = draw(
        test_packing_and_waiting_for_it_is_transfer.__doc__,
        "A>P, P>C, B>C",
        kinds={"P": "pack"},
        arrivals={("P", 1): 8},
    )
    # worker 0: packs 2; worker 1: neighbour 2-4, P runs 4-6, under way 6-8
    assert accounts(record) == {"compute": 8, "neighbour": 2, "transfer": 6, "unemployed": 4}


def test_input_that_seems_to_end_after_the_start_loses_no_time() -> None:
    """With clocks misaligned by 1, A seems to end at 5 although C starts at 4.

    0.0 |AAAAA.|
    1.0 |BB..CC|
    """
    text = test_input_that_seems_to_end_after_the_start_loses_no_time.__doc__
    assert accounts(draw(text, "A>C, B>C")) == {"compute": 9, "neighbour": 2, "unemployed": 1}


def test_overlapping_tasks_are_a_closure_error() -> None:
    """Two tasks on one thread at once for two nanoseconds: 12 booked in a span of 10.

    0.0 |AAAAAA....|
    0.0 |....BBBBBB|
    """
    ledger = Profile.from_record(draw(test_overlapping_tasks_are_a_closure_error.__doc__)).ledger
    assert ledger.accounts_ns["compute"] == 12
    assert ledger.available_ns == 10
    assert ledger.closure_error == pytest.approx(0.2, abs=1e-15)  # 2 / 10, to rounding


def test_interval_that_reaches_out_of_its_task_is_a_closure_error() -> None:
    """A second kernel interval in A goes on for three nanoseconds after A.

    0.0 |AAaa......|
    """
    record = draw(test_interval_that_reaches_out_of_its_task_is_a_closure_error.__doc__)
    record.intervals.append((0, "kernel", "work", 2, 7, 5))
    ledger = Profile.from_record(record).ledger
    assert ledger.accounts_ns["compute"] == 7
    assert ledger.closure_error == pytest.approx(3 / 4, abs=1e-15)


def test_run_without_tasks_has_empty_accounts() -> None:
    """Nothing ran.

    0.0 |....|
    """
    assert accounts(draw(test_run_without_tasks_has_empty_accounts.__doc__)) == {}


def test_gaps_and_their_explanation() -> None:
    """D waits from 2 to 9: E runs, R runs, A runs, as in the drawing from right to left.

    0.0 |AAAAr......|
    1.0 |BB...EE....|
    2.0 |CC.......DD|
    """
    record = draw(
        test_gaps_and_their_explanation.__doc__,
        "A>R reduction, R>E reduction, B>E, E>D, C>D",
        kinds={"R": "combine"},
        arrivals={("E", 2): 8},
        stages={"A": "burn", "E": "sweep", "R": "dt"},
    )
    ledger = Profile.from_record(record).ledger
    parts = ledger.explain(3)
    assert list(parts.itertuples(index=False, name=None)) == [
        ("engine", "ready", 3, 8, 9, 1),
        ("transfer", "under way", 4, 7, 8, 1),
        ("neighbour", "running", 4, 5, 7, 2),
        ("engine", "running", 17, 4, 5, 1),
        ("reduction", "running", 0, 2, 4, 2),
    ]
    assert ledger.explain(0).empty
    gap = ledger.gaps.set_index("task").loc[3]
    assert gap.to_dict() == {
        "worker": 2,
        "thread": 0,
        "start_ns": 2,
        "end_ns": 9,
        "neighbour": 2,
        "reduction": 2,
        "barrier": 0,
        "transfer": 1,
        "engine": 2,
    }
    waits = ledger.waits_by_stage
    assert waits.loc["burn", "reduction"] == 4  # gaps of worker 1 and worker 2
    assert waits.loc["sweep", "neighbour"] == 2
    assert waits.to_numpy().sum() == (ledger.gaps["end_ns"] - ledger.gaps["start_ns"]).sum()


def test_by_thread_partitions_each_thread() -> None:
    """Each thread's accounts sum to the span.

    0.0 |AAAAAA..|
    1.1 |........|
    1.0 |BB....CC|
    """
    ledger = Profile.from_record(draw(test_by_thread_partitions_each_thread.__doc__, "A>C, B>C")).ledger
    assert list(ledger.by_thread.index) == [(0, 0), (1, 0), (1, 1)]
    assert list(ledger.by_thread.sum(axis=1)) == [8, 8, 8]
    assert ledger.accounts_seconds["compute"] == pytest.approx(10e-9, rel=1e-15)  # one rounding


def test_long_chain_of_causes_is_walked_without_recursion() -> None:
    """Thread 1 waits while thread 0 runs a chain of 50000 tasks, each waiting for the one before."""
    record = draw("0.0 ||\n1.0 ||")
    count = 50_000
    rows = [(i, "step", "work", -1, 0, -1, 0, 0, 2 * i, 2 * i + 1, 0, False) for i in range(count)]
    record.tasks.extend(rows)
    record.tasks.append((count, "step", "work", -1, 0, -1, 1, 0, 2 * count, 2 * count + 5, 0, False))
    record.edges.extend((i, i + 1, "data") for i in range(count))
    record.intervals.extend((i, "kernel", "work", 2 * i, 2 * i + 1, 1) for i in range(count))
    ledger = Profile.from_record(record).ledger
    assert ledger.closure_error == 0.0
    # of the last task's wait, one nanosecond in two some task ran, and in the other it was being dispatched
    wait = ledger.gaps.set_index("task").loc[count]
    assert (wait["neighbour"], wait["engine"]) == (count, count)
    assert len(ledger.explain(count)) == 2 * count


def test_long_chain_with_a_barrier_at_each_link() -> None:
    """Each of 40 tasks D waits for the D before, then for a barrier Z behind a step B; X waits for the last.

    One link, from 10 i:

    0.0 |........D.|
    1.0 |BBBBB.Z...|
    2.0 |..........|
    """
    record = draw("0.0 ||\n1.0 ||\n2.0 ||")
    links = 40
    for i in range(links):
        for task, kind, worker, start, end in (
            (3 * i, "step", 1, 10 * i, 10 * i + 5),
            (3 * i + 1, "release", 1, 10 * i + 6, 10 * i + 7),
            (3 * i + 2, "step", 0, 10 * i + 8, 10 * i + 9),
        ):
            record.tasks.append((task, kind, kind, -1, 0, -1, worker, 0, start, end, 0, False))
        record.edges.extend([(3 * i, 3 * i + 1, "barrier"), (3 * i + 1, 3 * i + 2, "barrier")])
        if i:
            record.edges.append((3 * i - 1, 3 * i + 2, "data"))
    end = 10 * links
    record.tasks.append((3 * links, "step", "step", -1, 0, -1, 2, 0, end, end + 1, 0, False))
    record.edges.append((3 * links - 1, 3 * links, "data"))
    ledger = Profile.from_record(record).ledger
    assert ledger.closure_error == 0.0
    wait = ledger.gaps.set_index("task").loc[3 * links]
    assert (wait["start_ns"], wait["end_ns"]) == (0, end)
    # in each link B runs for 5, D for 1; the rest is Z, and the dispatch of Z, of D, and of what follows
    assert (wait["barrier"], wait["neighbour"], wait["engine"]) == (5 * links, links, 4 * links)
