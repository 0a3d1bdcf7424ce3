"""Tables that contradict each other are refused with the table, the column and the row."""

from __future__ import annotations

from collections.abc import Callable
from typing import cast

import networkx as nx
import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from breakstep.errors import ProfileError
from breakstep.profile.acyclic import task_on_cycle
from breakstep.profile.causes import BARRIER, COMBINE, COUNT, DATA, PACK, REDUCTION, RELEASE, STEP
from breakstep.profile.checks import sound_frames
from breakstep.profile.manifest import Manifest
from breakstep.profile.record import RunRecord
from breakstep.profile.run import Profile
from breakstep.profile.schema import EDGE_KINDS, LATEST_NS, TASK_KINDS
from breakstep.profile.settle import settled
from tests.unit.profile.sketch import draw


def task_row(task: int, **changes: object) -> tuple[object, ...]:
    row: dict[str, object] = draw("0.0 |A|").tasks.table().to_pylist()[0]
    return tuple((row | {"task": task} | changes).values())


FAULTS: dict[str, tuple[Callable[[RunRecord], object], str]] = {
    "thread twice": (
        lambda r: r.threads.append((0, 0)),
        "table threads: a thread is listed twice",
    ),
    "threads of the manifest": (
        lambda r: r.manifest.update(threads=3),
        "table threads: expected the 3 threads of the manifest, not 1",
    ),
    "workers of the manifest": (
        lambda r: r.manifest.update(workers=2),
        "table threads: expected the 2 workers of the manifest, not 1",
    ),
    "unknown thread": (
        lambda r: r.tasks.append(task_row(5, thread=1)),
        "table tasks: column worker, row 2: expected a thread of the table threads",
    ),
    "task twice": (
        lambda r: r.tasks.append(task_row(1)),
        "table tasks: column task, row 2: expected each number once, not 1",
    ),
    "task number below zero": (
        lambda r: r.tasks.append(task_row(-1)),
        "table tasks: column task, row 0: expected zero or more, not -1",
    ),
    "end before start": (
        lambda r: r.tasks.append(task_row(5, start_ns=9, end_ns=8)),
        "table tasks: column end_ns, row 2: expected an end that is not before the start, not 8",
    ),
    "time out of range": (
        lambda r: r.tasks.append(task_row(5, end_ns=LATEST_NS + 1)),
        "table tasks: column end_ns, row 2: expected a time within",
    ),
    "unknown kind of task": (
        lambda r: r.tasks.append(task_row(5, kind="dance")),
        "table tasks: column kind, row 2: expected one of step, combine, count, release, pack, not dance",
    ),
    "unknown tile": (
        lambda r: r.tasks.append(task_row(5, tile=26)),
        r"table tasks: column tile, row 2: expected a tile of the manifest \(it has 26\) or -1, not 26",
    ),
    "interval of an unknown task": (
        lambda r: r.intervals.append((9, "kernel", "work", 0, 1, 1)),
        "table intervals: column task, row 2: expected a number of the table tasks, not 9",
    ),
    "counter of an unknown task": (
        lambda r: r.counters.append((9, "work", "sub_steps", 1)),
        "table counters: column task, row 0: expected a number of the table tasks, not 9",
    ),
    "transfer to an unknown worker": (
        lambda r: r.transfers.append((0, "rho", 0, 4, 8, 0, 0, 0, 1)),
        "table transfers: column to_worker, row 0: expected a worker of the table threads, not 4",
    ),
    "fewer bytes than none": (
        lambda r: r.transfers.append((0, "rho", 0, 0, -8, 0, 0, 0, 1)),
        "table transfers: column bytes, row 0: expected zero or more, not -8",
    ),
    "task that waits for itself": (
        lambda r: r.edges.append((1, 1, "data")),
        "table edges: task 1 waits for itself through a ring of edges",
    ),
}


@pytest.mark.parametrize("fault", FAULTS)
def test_fault_is_named(fault: str) -> None:
    record = draw("0.0 |AB|", "A>B")
    Profile.from_record(record)  # sound so far
    spoil, message = FAULTS[fault]
    spoil(record)
    with pytest.raises(ProfileError, match=message):
        Profile.from_record(record)


def test_codes_written_out_beside_the_loops_are_those_of_the_schema() -> None:
    assert [TASK_KINDS[code] for code in (STEP, COMBINE, COUNT, RELEASE, PACK)] == list(TASK_KINDS)
    assert (EDGE_KINDS[DATA], EDGE_KINDS[REDUCTION], EDGE_KINDS[BARRIER]) == ("data", "reduction", "barrier")
    assert len(EDGE_KINDS) == 3


def test_word_listed_twice_in_its_dictionary_is_refused() -> None:
    """No writer of ours makes such a table; one from elsewhere may hold it."""
    record = draw("0.0 |AB|", "A>B")
    manifest, tables = settled(record)
    twice = pa.DictionaryArray.from_arrays(pa.array([1], pa.int32()), pa.array(["data", "data"]))
    tables["edges"] = tables["edges"].set_column(2, "kind", twice)
    with pytest.raises(ProfileError, match=r"place of tasks or a table beside it: .*must be unique"):
        sound_frames(tables, cast(Manifest, manifest), lambda table: f"place of {table}")


@settings(deadline=None)
@given(st.integers(1, 8).flatmap(lambda n: st.tuples(st.just(n), st.lists(st.tuples(*[st.integers(0, n - 1)] * 2)))))
def test_cycles_are_found_like_networkx_finds_them(graph: tuple[int, list[tuple[int, int]]]) -> None:
    tasks, edges = graph
    ends = np.array(edges, dtype=np.int64).reshape(-1, 2)
    found = task_on_cycle(tasks, ends[:, 0].copy(), ends[:, 1].copy())
    whole = nx.DiGraph(edges)
    assert (found == -1) == nx.is_directed_acyclic_graph(whole)
    if found >= 0:
        behind = {found} | nx.ancestors(whole, found)
        assert any(set(cycle) & behind for cycle in nx.simple_cycles(whole))
