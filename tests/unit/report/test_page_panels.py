"""The page's numbers from runs that were drawn by hand: one character is a millisecond."""

from __future__ import annotations

import re

import numpy as np
import pandas as pd
import pytest

from breakstep.errors import PairsError
from breakstep.profile.run import Profile
from breakstep.report.page.cells import Cells, cells_of
from breakstep.report.page.data import page_data
from breakstep.report.page.drawing import corners, face_lines, goes_around
from breakstep.report.page.grain import grain_words, larger_is_better
from breakstep.report.page.numbers import plain, significant
from breakstep.report.page.panels.columns import columns_panel
from breakstep.report.page.panels.fronts import fronts_panel
from breakstep.report.page.panels.idle import IdleTime
from breakstep.report.page.panels.memory import binned_highest
from breakstep.report.page.runs import Runs, runs_of
from breakstep.report.page.tables import first_moment, threads_words
from breakstep.report.page.waits import blame
from tests.unit.profile.sketch import manifest
from tests.unit.report.made import BARRED, FREE


def row_of(tiles: int, *, axis: int = 0, owners: list[int] | None = None) -> Cells:
    shape = [1, 1, 1]
    shape[axis] = tiles
    places = [[0, 0, 0] for _ in range(tiles)]
    for number, place in enumerate(places):
        place[axis] = number
    mesh = {"shape": shape, "tile_shape": [1, 1, 1], "tiles": [{"origin": p, "shape": [1, 1, 1]} for p in places]}
    return cells_of(manifest(2, 2, tiles, mesh=mesh, placement=owners or [0] * tiles))  # type: ignore[arg-type]


def square_of(edge: int) -> Cells:
    places = [[i, j, 0] for i in range(edge) for j in range(edge)]
    mesh = {
        "shape": [edge, edge, 1],
        "tile_shape": [1, 1, 1],
        "tiles": [{"origin": p, "shape": [1, 1, 1]} for p in places],
    }
    return cells_of(manifest(1, 1, edge**2, mesh=mesh))  # type: ignore[arg-type]


def test_a_square_of_tiles_is_drawn_with_its_second_axis_upwards() -> None:
    cells = square_of(3)
    where = {label: tuple(place) for label, place in zip(cells.labels, cells.places, strict=True)}
    assert where["0,0"] == (0, 2)
    assert where["2,0"] == (2, 2)
    assert where["0,2"] == (0, 0)
    steps = np.abs(np.diff(np.array(square_of(4).places), axis=0)).sum(axis=1)
    assert set(steps.tolist()) == {1}  # along the curve every step goes to a neighbour


def test_axes_of_one_tile_take_no_room() -> None:
    for axis in range(3):
        cells = row_of(5, axis=axis)
        assert (cells.columns, cells.rows) == (5, 1)


def test_too_many_tiles_are_drawn_in_blocks() -> None:
    cells = square_of(50)
    assert cells.block == 3
    assert cells.count == 17**2
    assert cells.labels[0] == "0-2,0-2"
    assert sorted(np.bincount(cells.of_tile).tolist())[-1] == 9


def test_a_cell_of_several_owners_belongs_to_nobody() -> None:
    assert row_of(3, owners=[0, 0, 1]).owners == [0, 0, 1]
    wide = row_of(1200, owners=[0] * 601 + [1] * 599)
    assert sorted(set(wide.owners)) == [-1, 0, 1]


def test_idle_time_grows_while_a_thread_waits_and_only_then() -> None:
    """Worker 1 runs C for 2 ms, waits for 7, runs D for 4: without the release, its wait is the barrier's."""
    profile = BARRED.profile()
    idle = IdleTime.of(profile)
    at = np.array([0, 2, 5, 9, 13]) * 1_000_000
    waited = int(profile.ledger.by_thread.loc[(1, 0), ["neighbour", "reduction", "barrier"]].sum())
    assert idle.until(1, at)[:2].tolist() == [0.0, 0.0]
    assert idle.until(1, at)[3] == pytest.approx(waited)
    assert idle.until(1, at)[4] == pytest.approx(waited)
    assert np.all(np.diff(idle.until(0, at)) >= 0)


def test_fronts_end_with_the_run_and_hold_all_idle_time_since_the_first() -> None:
    profile = FREE.profile()
    panel = fronts_panel(profile, cells_of(profile.manifest))
    assert panel["cycles"] == [0]
    assert set(panel["front_s"][-1]) == {panel["span_s"]}
    assert panel["idle_s"][0] == [0.0] * len(panel["idle_s"][0])


@pytest.mark.parametrize("drawn", [BARRED, FREE])
def test_columns_add_up_to_threads_times_span(drawn: object) -> None:
    profile = drawn.profile()  # type: ignore[attr-defined]
    panel = columns_panel(Runs(profile, None))
    total = sum(part["core_s"]["lockstep"] for part in panel["parts"])
    assert total == pytest.approx(panel["total_core_s"]["lockstep"], abs=2e-6 * len(panel["parts"]))  # each to 1 us


def test_bins_keep_the_highest_value_and_what_they_are_entered_with() -> None:
    series = pd.Series([5, 9, 1, 4], index=pd.Index([10, 12, 12, 35]))
    assert binned_highest(series, 0, np.array([0.0, 10.0, 20.0, 30.0, 40.0])) == [0, 9, 1, 4]
    assert binned_highest(series[:0], 0, np.array([0.0, 1.0])) == [0]


def test_runs_that_are_no_pair_are_refused() -> None:
    one, other = FREE.profile(), BARRED.profile()
    with pytest.raises(PairsError, match="as many runs in lockstep as tasked, not 1 and 2"):
        runs_of([other], [one, one])
    with pytest.raises(PairsError, match="all 2 runs are tasked"):
        runs_of([], [one, one])
    other.manifest["scenario"]["name"] = "else"
    with pytest.raises(PairsError, match="different scenarios or meshes"):
        runs_of([other], [one])


def pair() -> tuple[Profile, Profile]:
    return BARRED.profile(), FREE.profile()


def test_the_words_near_the_top_answer_from_the_figures() -> None:
    """Lockstep 13 ms on two threads, tasked 12: A runs 7, C 2, so at the barrier worker 1 waits for burn."""
    lockstep, tasked = pair()
    data = page_data(runs_of([lockstep], [tasked]))
    answers = {row["question"]: row["answer"] for row in data["answers"]}
    bought = answers["What would leaving lockstep buy?"]
    assert bought.startswith(
        "13 ms in lockstep, 12 ms tasked on 2 threads: 0.00200 of 0.0260 core-seconds handed back (lockstep less"
        " tasked; 1 ms of wall time)."
    )
    assert "one pair has no interval" in bought
    why = answers["Why do cores stand idle in lockstep?"]
    idle = sum(lockstep.ledger.accounts_ns[a] for a in ("neighbour", "reduction", "barrier", "unemployed"))
    burn = sum(blame(lockstep, a).get("burn", 0) for a in ("neighbour", "reduction", "barrier", "unemployed"))
    whole = "Of all idle core-seconds in lockstep, these steps are waited for: burn"
    assert why.startswith(f"{whole} {100 * burn / idle:.0f} %")
    assert f"For {100 * idle / lockstep.ledger.available_ns:.0f} % of their time" in why
    assert "waiting at a barrier" in why
    assert "root of its chain of causes" in why


def test_the_largest_advice_is_what_to_do_first() -> None:
    advice = [{"do": "Take out the barrier behind burn", "gain_s": 0.5, "bytes": 0, "memory_bytes": 0, "command": ""}]
    data = page_data(runs_of(*([one] for one in pair())), {"advice": advice})
    assert data["answers"][-1]["answer"].startswith(
        "Take out the barrier behind burn: by forecast that hands back 500 ms"
    )


def advised(**facts: object) -> dict[str, object]:
    return {"do": "run without barriers", "gain_s": 0.5, "bytes": 0, "memory_bytes": 0, "command": "", **facts}


def test_advice_says_what_the_page_measured_and_what_is_not_certain() -> None:
    lockstep, tasked = pair()
    command = f"breakstep run x --workers {lockstep.manifest['workers']} --barriers tasked"
    advice = [advised(command=command), advised(do="cut tiles of 8 x 8 zones", low_s=-0.1, high_s=1.1)]
    data = page_data(runs_of([lockstep], [tasked]), {"advice": advice})
    first, second = data["forecast"]["advice"]
    assert first["measured"] == "measured on this page: 1 ms handed back of 13 ms"
    assert (first["uncertain"], second["uncertain"], second["measured"]) == (False, True, "")
    answer = data["answers"][-1]["answer"]
    assert answer.startswith("Run without barriers: ")
    assert first["measured"] in answer


def grain(best: int, lockstep_best: float) -> dict[str, object]:
    """Tiles of 8, 16 and 32 zones, recorded with 16; tasked is fastest at one of them."""
    rows = [
        {
            "tile": [edge, edge], "tasks": 6400 // edge, "tiles": 64 // edge, "workers": 2,
            "lockstep_s": lockstep_best if edge == 32 else 9.0, "tasked_s": 5.0 if edge == best else 6.0,
        }
        for edge in (32, 16, 8)
    ]  # fmt: skip
    return {"grain": {"recorded_tile": [16, 16, 1], "rows": rows}}


def test_the_grain_in_words() -> None:
    words = grain_words(grain(32, 5.5))
    assert "lockstep with tiles of 32 \u00d7 32 zones, 5.50 s, is faster than tasked as recorded" in words
    assert (
        "The best tile (lockstep and tasked), 32 \u00d7 32, is the largest that was tried and leaves 2 tiles" in words
    )
    assert larger_is_better(grain(32, 5.5))
    assert not larger_is_better(grain(16, 7.0))
    assert "faster than tasked" not in grain_words(grain(16, 7.0))
    assert "smallest that was tried and leaves 8 tiles for 2 workers" in grain_words(grain(8, 7.0))


def test_numbers_that_json_cannot_hold_become_nothing() -> None:
    assert plain({1: (float("nan"), 2.0)}) == {"1": [None, 2.0]}
    assert significant(float("inf")) is None
    assert significant(123456.0, 3) == 123000.0
    assert significant(0.0) == 0.0


ROW_OF_THREE = {"columns": 3, "rows": 1, "places": [[0, 0], [1, 0], [2, 0]], "labels": ["0", "1", "2"]}


def test_bytes_across_a_periodic_edge_end_in_arrows_inside_the_map() -> None:
    around = {"cells": ROW_OF_THREE, "traffic": {"tasked": {"faces": [[0, 1, 100], [0, 2, 100]]}}}
    drawn = str(face_lines(around, "tasked"))
    assert goes_around(around, "tasked")
    assert drawn.count("tip-of-face") == 2
    corners_of_heads = [float(x) for x in re.findall(r"[ML]([-\d.]+) ", drawn)]
    assert 0 < min(corners_of_heads) < 1.5  # the tip of the arrow to the left: within the first cell, close to its edge
    assert 28.5 < max(corners_of_heads) < 30
    straight = {"cells": ROW_OF_THREE, "traffic": {"tasked": {"faces": [[0, 1, 100]]}}}
    assert not goes_around(straight, "tasked")
    assert "tip-of-face" not in face_lines(straight, "tasked")


def test_corners_of_a_map_are_named() -> None:
    square = {
        "columns": 2, "rows": 2, "places": [[0, 1], [1, 1], [0, 0], [1, 0]], "labels": ["0,0", "1,0", "0,1", "1,1"],
    }  # fmt: skip
    assert corners(square) == ("0,0", "1,1")
    assert corners({**square, "columns": 3}) == ("0,0", "")


def test_the_slider_begins_off_the_first_runs_fronts() -> None:
    """Lockstep begins cycles at 0, 1, 2, 3 s; tasked is spread most from 0.9 to 1.1 s, over that very front."""
    lockstep = {"span_s": 4.0, "front_s": [[0.0, 0.0], [1.0, 1.0], [2.0, 2.0], [3.0, 3.0], [4.0, 4.0]]}
    tasked = {"span_s": 4.0, "front_s": [[0.0, 0.0], [0.9, 1.1], [2.0, 2.0], [3.0, 3.0], [4.0, 4.0]]}
    moment = first_moment({"lockstep": lockstep, "tasked": tasked}) * 4.0 / 1000
    assert 0.9 <= moment < 1.0 - 0.04


@pytest.mark.parametrize(
    ("workers", "threads", "words"),
    [(2, 2, "2 workers, 1 thread each"), (1, 4, "1 worker, 4 threads each"), (2, 3, "2 workers, 3 threads in all")],
)
def test_workers_and_their_threads(workers: int, threads: int, words: str) -> None:
    assert threads_words(workers, threads) == words
