"""The account of a rehearsal, on runs drawn by hand: one character is a millisecond."""

from __future__ import annotations

import math
from pathlib import Path

import pyarrow as pa
import pytest

from breakstep.profile.run import Profile
from breakstep.profile.store import read_profile
from breakstep.report.comparison import run_figures
from breakstep.report.trust import SMALL, Trust, trust_of, trust_sentences
from tests.unit.profile.sketch import draw, with_fields
from tests.unit.report.made import MILLISECOND, slowed

WAITING = """
0.0 |AAAAAAAA..BBBB|
1.0 |CCCC......DDDD|
"""
STAGES = {"A": "burn", "C": "burn", "B": "solve", "D": "solve"}


def rehearsed(asked: dict[str, int], mode: str = "lockstep") -> Profile:
    """The drawing as waits that asked for so many milliseconds each."""
    record = slowed(draw(WAITING, "A>B, C>D, A>D", stages=STAGES), MILLISECOND)
    tables = record.tables()
    names = dict(zip(tables["tasks"]["task"].to_pylist(), _letters(tables["tasks"]), strict=True))
    intervals = tables["intervals"]
    cpu = [asked[names[task]] * MILLISECOND for task in intervals["task"].to_pylist()]
    place = intervals.column_names.index("cpu_ns")
    tables["intervals"] = intervals.set_column(place, intervals.schema.field("cpu_ns"), pa.array(cpu, pa.int64()))
    made = type(record)(manifest={**record.manifest, "mode": mode, "timed_steps": ["burn", "solve"], "dilate": 2.0})
    made.add_tables(tables)
    return Profile.from_record(with_fields(made, 1))


def _letters(tasks: pa.Table) -> list[str]:
    """Which letter drew each task, by thread and start."""
    order = {(0, 0): "A", (0, 10): "B", (1, 0): "C", (1, 10): "D"}
    starts = [start // MILLISECOND for start in tasks["start_ns"].to_pylist()]
    return [order[worker, start] for worker, start in zip(tasks["worker"].to_pylist(), starts, strict=True)]


def test_the_account_of_a_drawn_run() -> None:
    found = trust_of(rehearsed({"A": 7, "B": 4, "C": 4, "D": 3}))
    assert found is not None
    assert found.dilate == 2.0
    assert found.span_ns == 14 * MILLISECOND
    assert found.oversleep == pytest.approx(2 / 28)  # A and D are each a millisecond late, of two threads times 14
    assert found.bound_ns == (7 + 4) * MILLISECOND
    free = trust_of(rehearsed({"A": 7, "B": 4, "C": 4, "D": 3}, "tasked"))
    assert free is not None
    assert free.bound_ns == 11 * MILLISECOND
    other = trust_of(rehearsed({"A": 2, "B": 4, "C": 4, "D": 3}, "tasked"))
    assert other is not None
    assert other.bound_ns == 7 * MILLISECOND


def test_dilation_that_is_enough() -> None:
    def of(overhead: float) -> Trust:
        return Trust(2.0, overhead, 0.0, 0.0, 0, 0, 1, 1)

    assert of(SMALL).enough == 2.0
    found = of(0.25)
    stretched = 0.25 / (0.25 + 0.75 * found.enough / 2.0)  # the code's share grows with its waits, the rest does not
    assert stretched == pytest.approx(SMALL)
    assert math.isinf(of(1.0).enough)
    assert of(1.0).as_json()["dilate_at_least"] is None


def test_the_worst_of_two_runs_decides() -> None:
    late, good = rehearsed({"A": 2, "B": 4, "C": 4, "D": 4}), rehearsed({"A": 8, "B": 4, "C": 4, "D": 4}, "tasked")
    (sentence,) = trust_sentences([late, good])
    worst = max(trust.overhead for run in (late, good) if (trust := trust_of(run)))
    assert sentence.startswith(f"Rehearsal at dilation 2: up to {100 * worst:.1f} % of the time is not the code's")
    assert "Dilate by at least" in sentence
    assert run_figures(late)["rehearsal"]["dilate"] == 2.0


def test_runs_of_real_steps_have_no_such_account() -> None:
    profile = read_profile(Path(__file__).parents[3] / "profiles" / "single_spark" / "lockstep")
    assert trust_of(profile) is None
    assert trust_sentences([profile]) == []
    assert run_figures(profile)["rehearsal"] is None
