"""A record put together from the parts of simulated workers: every wait has its edge, every message its task."""

from __future__ import annotations

from collections.abc import Sequence
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from breakstep.engine.execute import execute
from breakstep.engine.program import Program
from breakstep.engine.resident.core import TaskState
from breakstep.engine.resident.gather import gather_record
from breakstep.engine.resident.inputs import inputs_of, site_of
from breakstep.engine.resident.notes import Notebook
from breakstep.engine.resident.wire import Parcel
from breakstep.engine.run import RunOptions
from breakstep.graph.numbering import Numbering
from breakstep.profile.record import RunRecord
from breakstep.steps.step import Read
from tests.mixtures import measured, mixing, repeated
from tests.simulated import Message, SimulatedCluster
from tests.unit.engine.resident.hands import line

WORKERS = 4
ZEROS = (0, 1000, -500, 70)  # each worker's clock has an origin of its own


class RecordedCluster(SimulatedCluster):
    """Workers with notebooks; every event takes one tick of a clock that all share."""

    def __init__(self, program: Program, owners: Sequence[int], barriers: Sequence[str], seed: int = 0) -> None:
        super().__init__(program, owners, WORKERS, barriers=barriers, seed=seed)
        self.options = RunOptions(barriers=tuple(barriers))
        self.notes = []
        for worker, core in enumerate(self.cores):
            told = SimpleNamespace(
                program=program, options=self.options, worker=worker, zero=ZEROS[worker], addresses=("",) * WORKERS
            )
            notes = Notebook(told)  # type: ignore[arg-type]
            core.on_phase = notes.phase
            for part in (core._reductions, core._barriers):
                object.__setattr__(part._exits, "control", self._control(worker))
            self.notes.append(notes)

    def _control(self, worker: int) -> Any:
        return lambda kind, phase, place: self.notes[worker].control(kind, phase, place, self.clock(worker))

    def clock(self, worker: int) -> int:
        """A worker's own reading of the tick."""
        return 10 * self.steps + ZEROS[worker]

    def _finish(self, worker: int, task: TaskState) -> bool:
        output = execute(self.program, site_of(task), inputs_of(self.cores[worker], task))
        self.notes[worker].task(task, 0, self.clock(worker), output, None)
        return super()._finish(worker, task)

    def _deliver(self, message: Message) -> bool:
        parcel = Parcel([(message.key, message.payload)], sent=self.clock(message.sender) - 5, packed=2, unpacked=1)
        self.notes[message.worker].arrivals(message.sender, parcel, self.clock(message.worker))
        return super()._deliver(message)

    def parts(self) -> list[dict[str, Any]]:
        """What workers hand over."""
        return [
            {
                "worker": worker,
                "zero": ZEROS[worker],
                "tables": self.notes[worker].recorder.record.tables(),
                "arrived": self.notes[worker].recorder.arrived,
                "answers": self.cores[worker].answers,
            }
            for worker in range(WORKERS)
        ]

    def gathered(self, parts: Sequence[dict[str, Any]]) -> dict[str, Any]:
        """The record's tables as data frames."""
        record, stages = RunRecord(), self.program.template.stages_with_barrier(self.options.barriers)
        owners = self.cores[0].plan.owners
        numbering = Numbering(len(owners), WORKERS, stages)
        gather_record(record, parts, self.program, self.options, owners, numbering)
        return {name: table.to_pandas() for name, table in record.tables().items()}


def program() -> Program:
    """Ten tiles, so that trees have two levels; a repeat, so that verdicts decide; a result that lags."""
    halo = Read("a", (1, 0, 0))
    passes = repeated("p", [mixing("relax", [halo, Read("b")], ["b"])], "b")
    return line([mixing("move", [halo], ["a"], ["dt"]), passes], 10, 3, [measured("dt", "b", lag=1)], fuse=True)


OWNERS = [0, 0, 2, 2, 0, 1, 1, 1, 2, 0]  # worker 3 has none


def recorded(lockstep: bool) -> RecordedCluster:
    names = program().template.barrier_names() if lockstep else ()
    cluster = RecordedCluster(program(), OWNERS, names)
    cluster.run()
    return cluster


@pytest.mark.parametrize("lockstep", [False, True])
def test_every_edge_joins_tasks_that_ran_in_this_order(lockstep: bool) -> None:
    cluster = recorded(lockstep)
    tables = cluster.gathered(cluster.parts())
    tasks, edges = tables["tasks"].set_index("task"), tables["edges"]
    assert tasks.index.is_unique
    assert sorted(tasks.index) == list(range(len(tasks)))
    steps = tasks[tasks["kind"] == "step"]
    assert len(steps) == len(cluster.order)
    for edge in edges.itertuples():
        assert tasks.loc[edge.producer, "start_ns"] <= tasks.loc[edge.consumer, "start_ns"]
    assert set(edges["kind"]) == {"data", "reduction", "barrier"} if lockstep else {"data", "reduction"}
    begin = tasks.loc[sorted(set(tasks.index) - set(edges["consumer"]))]
    idle = begin[begin["kind"] == "count"]
    assert set(idle["worker"]) <= {3}, "only a worker without tiles counts without having waited"
    assert set(begin[begin["kind"] != "count"]["cycle"]) == {-1}, "only the first measurement waits for nothing"


@pytest.mark.parametrize("lockstep", [False, True])
def test_messages_name_the_task_that_made_what_they_carry(lockstep: bool) -> None:
    """And an edge crosses workers exactly where a message went, barriers apart: a release is passed on."""
    cluster = recorded(lockstep)
    tables = cluster.gathered(cluster.parts())
    tasks, transfers = tables["tasks"].set_index("task"), tables["transfers"]
    for row in transfers.itertuples():
        made = tasks.loc[row.producer]
        assert row.to_worker != row.from_worker
        if made["kind"] != "release":
            assert made["worker"] == row.from_worker
        assert made["start_ns"] <= row.sent_ns + 5 <= row.arrived_ns
        assert (row.packed_ns, row.unpacked_ns) == (2, 1)
    worker = tasks["worker"]
    moved = {(row.producer, row.to_worker) for row in transfers.itertuples()}
    data = tables["edges"][tables["edges"]["kind"] != "barrier"]
    crossing = {(e.producer, worker[e.consumer]) for e in data.itertuples() if worker[e.producer] != worker[e.consumer]}
    assert crossing <= moved
    spare = {(p, to) for p, to in moved - crossing if tasks.loc[p, "kind"] not in ("count", "release", "combine")}
    assert spare == set(), "rims and contributions go only where they are read; results go to everybody"


def test_a_lost_worker_leaves_gaps_and_no_wrong_numbers() -> None:
    """Worker 1 is gone, and the last one has no tiles: numbers are still those of four workers."""
    cluster = recorded(lockstep=True)
    parts = cluster.parts()
    whole, left = cluster.gathered(parts), cluster.gathered([part for part in parts if part["worker"] != 1])
    assert left["edges"].equals(whole["edges"])
    kept = whole["tasks"][whole["tasks"]["worker"] != 1].reset_index(drop=True)
    assert left["tasks"].astype(str).equals(kept.astype(str))
    numbers = set(whole["transfers"]["producer"])
    assert set(left["transfers"]["producer"]) <= numbers
    assert 1 not in set(left["transfers"]["to_worker"]) | set(left["transfers"]["from_worker"])


def test_a_run_that_was_stopped_has_edges_as_far_as_it_came() -> None:
    cluster = RecordedCluster(program(), OWNERS, ())
    while not cluster.cores[0].answers:
        cluster.step()
    tables = cluster.gathered(cluster.parts())
    ran = set(tables["tasks"]["task"])
    assert ran <= set(tables["edges"]["producer"]) | set(tables["edges"]["consumer"]) | set(range(10))
    assert len(ran) > 10
    assert np.isin(tables["transfers"]["producer"], list(ran | set(tables["edges"]["producer"]))).all()
