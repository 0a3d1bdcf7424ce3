"""Ranking: shares that sum, an order that is best, and reductions that tie what barriers do not."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from breakstep.forecast.basis import Basis, basis_of
from breakstep.forecast.figures import advice_figures, page_forecast
from breakstep.forecast.question import Question
from breakstep.forecast.ranking import Ranking, best_order, rank_kinds
from breakstep.forecast.setting import recorded_machine
from breakstep.profile.run import Profile
from tests.unit.forecast.recorded import MS, Ring, Stage, hot


def ranked(basis: Basis, workers: int = 2) -> Ranking:
    """The ranking on the machine of recording."""
    return rank_kinds(basis, recorded_machine(basis.first), Question(), workers)


def moving(cycles: int, lag: int) -> list[Stage]:
    """One hot tile a cycle, a different one each, and dt made at the end of every cycle."""
    phases = [Stage("m", [MS] * 8, -1, makes="dt")]
    for cycle in range(cycles):
        costs = [(60 if tile == (cycle * 3) % 8 else 4) * MS for tile in range(8)]
        used = max(cycle - lag, 0)
        phases.append(Stage("a", costs, cycle, makes="dt", uses=(("dt", used),), neighbours=False))
    return phases


def test_shares_and_gains_in_order_sum_to_the_whole() -> None:
    ranking = ranked(basis_of([Ring(hot(24)).profile()]))
    whole = float(ranking.makespans[0] - ranking.makespans[-1]) * 1e-9
    rows = ranking.rows()
    assert whole > 0.0
    assert sum(row["share_s"] for row in rows) == pytest.approx(whole)
    assert sum(row["in_order_s"] for row in rows) == pytest.approx(whole)
    assert sorted(row["place_in_order"] for row in rows) == list(range(1, len(rows) + 1))


def test_the_best_order_is_best_among_all() -> None:
    """Against all 120 orders of five kinds with random gains that neither add nor are one-sided."""
    random = np.random.default_rng(7)
    makespans = np.concatenate([[2000], random.integers(500, 2000, 31)])
    order, marginal = best_order(makespans)

    def worth(chosen: tuple[int, ...]) -> int:
        subsets = itertools.accumulate((1 << kind for kind in chosen), lambda a, b: a | b)
        return sum(int(makespans[0] - makespans[subset]) for subset in subsets)

    assert worth(tuple(order)) == max(worth(chosen) for chosen in itertools.permutations(range(5)))
    assert sum(marginal) == makespans[0] - makespans[-1]


def test_gains_that_only_come_together_are_shared() -> None:
    """Two barriers of which either alone holds everything: nothing alone, half each as a share."""
    from breakstep.forecast.ranking import Kind

    pair = Ranking((Kind("x", ("x",)), Kind("y", ("y",))), np.array([100, 100, 100, 40]), 40, 40)
    assert [(row["alone_s"], row["share_s"]) for row in pair.rows()] == [(0.0, pytest.approx(30e-9))] * 2


def test_reductions_used_at_once_tie_what_barriers_no_longer_tie() -> None:
    tie = ranked(basis_of([Ring(moving(12, 0), lags={"dt": 0}).profile()])).tie()
    assert tie["reductions_limit_gain"] is True
    assert tie["held_by_reductions_s"] > 5 * max(tie["barriers_gain_s"], 0.0)
    assert tie["later_reductions_gain_s"] > 0.0


def test_reductions_used_late_do_not() -> None:
    tie = ranked(basis_of([Ring(moving(12, 3), lags={"dt": 3}).profile()])).tie()
    assert tie["reductions_limit_gain"] is False
    assert tie["barriers_gain_s"] > tie["held_by_reductions_s"]


def test_even_work_ranks_nothing_high() -> None:
    phases = [Stage(f"s{n % 2}", [5 * MS] * 8, n // 2) for n in range(12)]
    ranking = ranked(basis_of([Ring(phases).profile()]))
    turns = 12 * 1.0e-3  # what barriers themselves take: a turn and a gap each
    assert all(abs(row["share_s"]) <= turns for row in ranking.rows())


def test_many_kinds_are_grouped_to_eight() -> None:
    phases = [Stage(f"s{n}", [(20 if tile == n % 8 else 5) * MS for tile in range(8)], 0) for n in range(12)]
    ranking = ranked(basis_of([Ring(phases).profile()]))
    assert len(ranking.kinds) == 8
    assert sum(len(kind.stages) for kind in ranking.kinds) == 12
    assert any(row["what"].startswith("other barriers") for row in ranking.rows())


def test_commands_repeat_how_the_run_was_placed_and_dispatched() -> None:
    record = Ring(hot(12)).record()
    record.manifest["scenario"]["resolved"] = {"run": {"placement": "curve", "dispatch": "resident"}}
    record.manifest |= {"dispatch": "native"}
    basis = basis_of([Profile.from_record(record)])
    machine = recorded_machine(basis.first)
    found = advice_figures(basis, machine, Question(), 2, ranked(basis))
    assert found
    for advice in found:
        assert "--dispatch native" in advice["command"]
        assert "--placement" in advice["command"]


def test_a_page_of_runs_that_cannot_be_forecast_from_goes_without() -> None:
    record = Ring(hot(12)).record()
    record.manifest["status"] = "interrupted"
    unfinished = Profile.from_record(record)
    assert page_forecast(unfinished, None) == page_forecast(None, None) == {}
    assert page_forecast(Ring(hot(12)).profile(), Ring(hot(9), lockstep=False).profile()) == {}
