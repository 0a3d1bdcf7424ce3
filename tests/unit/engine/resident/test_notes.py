"""The rows that a worker enters, and for how long it knows their numbers."""

from __future__ import annotations

from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from breakstep.engine.execute import Output
from breakstep.engine.program import Program
from breakstep.engine.resident.cycles import cycles_kept
from breakstep.engine.resident.notes import Notebook, producer_of
from breakstep.engine.resident.states import PhaseState, TaskState
from breakstep.engine.resident.wire import Parcel
from breakstep.engine.run import RunOptions, unroller_for
from breakstep.graph.numbering import Numbering
from breakstep.graph.unroll import Phase
from tests.mixtures import mixing
from tests.unit.engine.resident.hands import DT, HALO, STEERED, line


def notebook(program: Program, **options: Any) -> Notebook:
    """One of two workers; the clock's zero is 1000."""
    told = SimpleNamespace(
        program=program, options=RunOptions(**options), worker=1, zero=1000, addresses=("there", "here")
    )
    return Notebook(told)  # type: ignore[arg-type]


def phases_of(program: Program) -> list[Phase]:
    return [phase for phase in unroller_for(program, RunOptions()).run() if isinstance(phase, Phase)]


def rows(notes: Notebook, table: str) -> list[dict[str, Any]]:
    return notes.recorder.record.buffer(table).table().to_pylist()  # type: ignore[no-any-return]


@pytest.mark.parametrize("steps", [1, 120])
def test_numbers_are_known_while_their_cycle_may_be_open_and_forgotten_afterwards(steps: int) -> None:
    """However many phases a cycle has: with 120 and a window of four, 600 are under way at once."""
    program = line([mixing(f"s{i}", [HALO], ["a"]) for i in range(steps)], cycles=12, tiles=2)
    notes, kept = notebook(program, window=4), cycles_kept(4, 0)
    whole = Numbering(2, 2, frozenset())
    for phase in phases_of(program):
        whole.add(phase)
        notes.phase(phase)
        known = notes.numbering.phases
        newest = phase.cycle
        first = 1 + max(newest - kept + 1, 0) * steps
        assert list(known) == list(range(first, phase.number + 1))
        for number in (first, phase.number):
            assert notes.numbering.step(number, 1) == whole.step(number, 1)


def test_a_task_is_entered_with_its_number_and_its_packing() -> None:
    program = line(cycles=2)
    notes = notebook(program)
    first, second = phases_of(program)
    notes.phase(first)
    notes.phase(second)
    task = TaskState(PhaseState(2, second), 3, (1, 0, 2))
    began = notes.watch()
    end = notes.task(task, 0, 1500, Output({"a": np.zeros((1, 2, 1, 1))}, {}), began)
    (row,) = rows(notes, "tasks")
    assert (row["task"], row["kind"], row["stage"], row["tile"], row["cycle"]) == (4 + 3, "step", "smooth", 3, 1)
    assert (row["worker"], row["start_ns"], row["end_ns"], row["output_bytes"]) == (1, 500, end - 1000, 16)
    (packing,) = rows(notes, "intervals")
    assert (packing["task"], packing["what"], packing["end_ns"]) == (7, "pack", end - 1000)


def test_control_is_entered_as_moments() -> None:
    program = line([STEERED], reductions=[DT], cycles=1)
    names = program.template.barrier_names()
    notes = notebook(program, barriers=names)
    (measure, *_) = phases = phases_of(program)
    for phase in phases:
        notes.phase(phase)
    notes.control("combine", measure, (0, 0, 0), 1010)
    notes.control("count", measure, (1,), 1020)
    notes.control("release", measure, (), 1030)
    found = [(r["task"], r["kind"], r["stage"], r["start_ns"], r["end_ns"]) for r in rows(notes, "tasks")]
    label = f"barrier:{measure.stage.name}"
    assert found == [
        (4, "combine", "dt", 10, 10),
        (6, "count", label, 20, 20),
        (7, "release", label, 30, 30),
    ]


def test_a_message_books_its_packing_once() -> None:
    rims = {("a", 1, (1, 0, 0)): np.zeros((1, 1, 1, 1)), ("b", 1, (1, 0, 0)): np.zeros((1, 1, 1, 1))}
    notes = notebook(line())
    parcel = Parcel([(("rims", 2, 1, 1), rims), (("release", 1), None)], sent=7, packed=30, unpacked=20)
    notes.arrivals(0, parcel, arrived=1100)
    assert notes.recorder.arrived == [
        (("rims", 2, 1, 1), "a", 0, 8, 30, 20, 7, 100),
        (("rims", 2, 1, 1), "b", 0, 8, 0, 0, 7, 100),
        (("release", 1), "control", 0, 0, 0, 0, 7, 100),
    ]


def test_nothing_is_entered_when_recording_is_off() -> None:
    program = line()
    notes = notebook(program, record=False)
    (phase, *_) = phases_of(program)
    notes.phase(phase)
    notes.task(TaskState(PhaseState(1, phase), 0, (0, 0, 1)), 0, 0, Output({}, {}), None)
    notes.control("release", phase, (), 0)
    notes.arrivals(0, Parcel([(("release", 1), None)]), 0)
    assert rows(notes, "tasks") == notes.recorder.arrived == []
    assert notes.numbering.phases == {}


def test_who_made_an_item() -> None:
    """Two workers, nine tiles: trees of 2 + 1 nodes behind the steps, then two counters and the release."""
    program = line([STEERED], tiles=9, cycles=1, reductions=[DT])
    numbering = Numbering(9, 2, program.template.stages_with_barrier(program.template.barrier_names()))
    phases = phases_of(program)
    for phase in phases:
        numbering.add(phase)
    makers = {making.instance: phase.number for phase in phases for making in phase.makes}
    assert [phase.stage.name for phase in phases] == ["dt", "steered", "dt"]
    keys = {
        ("part", 0, 0, 7): 7,  # tile 7's contribution
        ("part", 0, 1, 1): 9 + 1,  # the second node of the lowest level
        ("value", 0): 9 + 2,
        ("count", 1, 1): 12 + 1,
        ("release", 1): 14,
        ("rims", 2, 4, 0): -1,  # of the initial state
        ("rims", 3, 4, 2): 15 + 4,
    }
    assert {key: producer_of(key, 1, numbering, makers) for key in keys} == keys
