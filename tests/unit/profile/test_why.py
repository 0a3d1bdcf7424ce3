"""Waits told in words: which one, why, and what is said when there is none."""

from __future__ import annotations

import json

import pytest

from breakstep.errors import ChoiceError
from breakstep.profile.run import Profile
from breakstep.profile.why import SHOWN
from tests.unit.profile.sketch import draw, number
from tests.unit.report.made import MILLISECOND, slowed

CHAINED = """
    0.0 |AAAA.......|
    1.0 |BB..EEEFF..|
    2.0 |CC.......DD|
    """
STAGES = {"A": "burn", "B": "sweep", "C": "sweep", "E": "sweep", "F": "sweep+burn", "D": "relax"}


def chained() -> Profile:
    """D waits 7 ms for F, which is queued behind E, which waits for A; a character is a millisecond."""
    return Profile.from_record(slowed(draw(CHAINED, "A>E, B>F, F>D, C>D", stages=STAGES), MILLISECOND))


def test_the_longest_wait_in_words() -> None:
    assert chained().why().lines() == [
        "drawn, tasked: the longest wait is 7.0000 ms. Thread 0 of worker 2 stood idle",
        "until 9.0000 ms after the first task's start, when it took up relax on tile 3 in",
        "cycle 0.",
        "",
        "     ms  account               what was going on, the latest first",
        " 2.0000  wait: neighbour tile  worker 1 was running sweep+burn on tile 5 in",
        "                               cycle 0",
        " 3.0000  wait: neighbour tile  sweep+burn on tile 5 in cycle 0 had all it",
        "                               needed, but worker 1 was busy with sweep on tile",
        "                               4 in cycle 0",
        " 2.0000  dispatch (engine)     sweep+burn on tile 5 in cycle 0 had all it",
        "                               needed; worker 1 had not yet begun it",
        " 7.0000  = the wait",
    ]


def test_the_figures_behind_the_words() -> None:
    found = chained().why()
    assert (found.wait_ns, found.start_ns, found.end_ns, found.thread) == (7_000_000, 2_000_000, 9_000_000, (2, 0))
    assert (found.task["task"], found.task["stage"], found.task["tile"]) == (number("D"), "relax", 3)
    assert found.accounts_ns == {"neighbour": 5_000_000, "engine": 2_000_000}
    assert found.parts["ns"].tolist() == [2_000_000, 3_000_000, 2_000_000]
    assert found.parts["worker"].tolist() == [1, 1, 1]
    assert found.parts["stage"].tolist() == ["sweep+burn"] * 3
    whole = json.loads(json.dumps(found.as_json(), allow_nan=False))
    assert sum(part["ns"] for part in whole["parts"]) == whole["wait_ns"] == 7_000_000
    assert (whole["task"]["tile_name"], whole["parts"][0]["tile_name"]) == ("3", "5")


@pytest.mark.parametrize(
    ("asked", "task", "wait"),
    [
        ({"step": "sweep"}, "E", 2),
        ({"step": "sweep", "cycle": 0}, "E", 2),
        ({"tile": 4}, "E", 2),
        ({"tile": (4,)}, "E", 2),
        ({"tile": (4, 0, 0), "step": "sweep"}, "E", 2),
        ({"step": "relax"}, "D", 7),
        ({"cycle": 0}, "D", 7),
    ],
)
def test_a_wait_can_be_named(asked: dict[str, object], task: str, wait: int) -> None:
    found = chained().why(**asked)  # type: ignore[arg-type]
    assert (found.task["task"], found.wait_ns) == (number(task), wait * MILLISECOND)


def test_a_task_that_nobody_waited_for() -> None:
    """F took over from E without a pause, although it is a sweep+burn and has its data at 2."""
    found = chained().why(tile=5, step="burn", cycle=0)
    assert (found.wait_ns, found.thread, found.task, len(found.parts)) == (0, (-1, -1), {}, 0)
    assert found.lines() == [
        "drawn, tasked: no thread stood idle before burn on tile 5 in cycle 0; there is",
        "no wait to explain.",
    ]
    assert found.as_json()["task"] is None
    assert "no thread stood idle" in found._repr_html_()


def test_a_run_that_did_nothing() -> None:
    assert Profile.from_record(draw("0.0 |....|")).why().lines() == [
        "drawn, tasked: no thread stood idle before any task; there is no wait to",
        "explain.",
    ]


@pytest.mark.parametrize(
    ("asked", "sentence"),
    [
        ({"tile": 26}, "tile 26: expected a tile of the run, which has 26 x 1 x 1 of them along x, y and z"),
        ({"tile": -1}, "tile -1: expected a tile"),
        ({"tile": (0, 1)}, "tile 0,1: expected a tile"),
        ({"tile": (0, 0, 0, 0)}, "tile 0,0,0,0: expected a tile"),
        ({"tile": ()}, "expected a tile"),
        ({"cycle": 1}, "cycle 1: expected a cycle of the run, which has the cycles 0 to 0; name one of those"),
        ({"step": "melt"}, "step melt: expected a step of the run, which has burn, relax, sweep; name one of those"),
        ({"tile": 3, "step": "sweep"}, "the run has no task for sweep on tile 3; ask for less at once"),
    ],
)
def test_what_does_not_exist_is_refused(asked: dict[str, object], sentence: str) -> None:
    with pytest.raises(ChoiceError) as refused:
        chained().why(**asked)  # type: ignore[arg-type]
    assert sentence in str(refused.value)


def test_a_long_chain_is_summed_up() -> None:
    """Thread 1 waits while thread 0 runs 40 tasks one after the other, each a nanosecond longer."""
    record = draw("0.0 ||\n1.0 ||")
    moment = 0
    for task in range(40):
        row = (task, "step", "work", task % 26, 0, -1, 0, 0, moment, moment + 1000 + task, 0, False)
        record.tasks.append(row)
        moment += 1000 + task
    record.tasks.append((40, "step", "work", 1, 0, -1, 1, 0, moment, moment + 5, 0, False))
    record.edges.extend((task, task + 1, "data") for task in range(40))
    found = Profile.from_record(record).why()
    rows, _ = found.told()
    assert (len(found.parts), len(rows)) == (40, SHOWN + 1)
    assert [text for _, label, text in rows if label == "all the rest"] == ["30 shorter parts"]
    assert found.wait_ns == moment == sum(found.parts["ns"])
    assert len(found.lines()) < 25


def test_markup_in_names_stays_text() -> None:
    record = draw(CHAINED, "A>E, B>F, F>D, C>D", stages={**STAGES, "F": "<b>bold</b>"})
    record.manifest["scenario"] = {"name": "<script>alert(1)</script>", "title": "<i>"}
    profile = Profile.from_record(record)
    shown = [profile._repr_html_(), profile.why()._repr_html_(), profile.figures.steps._repr_html_()]
    shown += [figure._repr_html_() for figure in (profile.figures.accounts, profile.figures.chain)]
    shown += [profile.figures.live._repr_html_(), profile.figures.map("<b>bold</b>")._repr_html_()]
    for page in shown:
        assert "<script" not in page
        assert "<b>" not in page
        assert "&lt;" in page
