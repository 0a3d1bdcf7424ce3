"""The sentences that say why: each appears when its figures are there, and only then."""

from __future__ import annotations

from dataclasses import replace

from breakstep.report.reasons import reasons
from tests.unit.report.made import BARRED, EVEN, EVEN_BARRED, FREE, NEIGHBOURS, REDUCED, STAGES, Drawn


def told(left: Drawn, right: Drawn) -> list[str]:
    """The sentences about one pair."""
    return reasons(left.profile(), right.profile())


def about(sentences: list[str], words: str) -> str:
    """The one sentence that holds some words, or nothing."""
    found = [sentence for sentence in sentences if words in sentence]
    assert len(found) <= 1
    return found[0] if found else ""


def test_barriers_that_cost_are_explained_by_the_uneven_step() -> None:
    """Core 1 waits 6 of 26 core-milliseconds; burning takes 8 and 2, so the busiest has 8 over a mean of 5."""
    first = told(BARRED, FREE)[0]
    assert first.startswith("Why: in lockstep cores waited at barriers for 23 % of their time, mostly for burn (")
    assert "the busiest worker of a phase has 1.60 times the mean work" in first


def test_waits_for_a_step_are_added_up_over_its_stages() -> None:
    """Burning is in two stages, with 3 ms of waiting each; the sweep has one with 4."""
    stages = {"A": "dt+burn", "D": "dt+burn", "B": "burn", "E": "burn", "C": "sweep_x", "F": "sweep_x", "G": "sweep_x"}
    barred = Drawn(
        "0.0 |AAAArBBBBsCCCCCt.|\n1.0 |D....E....F.....G|",
        "A>R barrier, D>R barrier, R>B barrier, R>E barrier, B>S barrier, E>S barrier, S>C barrier, S>F barrier,"
        " C>T barrier, F>T barrier, T>G barrier, A>B, D>E, B>C, E>F, F>G",
        {"stages": stages, "kinds": dict.fromkeys("RST", "release")},
        {"mode": "lockstep", "barriers": ["burn", "sweep_x"]},
    )
    assert barred.profile().ledger.waits_by_stage["barrier"].idxmax() == "sweep_x"
    assert "for 29 % of their time, mostly for burn" in told(barred, FREE)[0]


def test_even_phases_are_called_even() -> None:
    (only,) = told(EVEN_BARRED, EVEN)
    assert only == ("Why: in lockstep cores waited at barriers for only 0.0 % of their time; the phases are even.")


def test_phases_are_not_called_even_when_a_reduction_made_cores_wait_first() -> None:
    barred = REDUCED.saying(mode="lockstep", barriers=["burn", "sweep_x", "dt"])
    first = told(barred, REDUCED)[0]
    assert "even" not in first
    assert "0.0 % of their time, and for reductions, which hold tasks back as well, for 23 %" in first


def test_phases_are_not_called_even_when_they_are_not() -> None:
    """Uneven work that no barrier stood behind."""
    first = told(FREE.saying(mode="dt", barriers=["dt"]), FREE)[0]
    assert first == "Why: with the barrier dt cores waited at barriers for only 0.0 % of their time."


def test_without_barriers_there_is_no_word_on_them() -> None:
    assert about(told(EVEN, EVEN), "barriers for") == ""


def test_a_reduction_without_lag_is_explained() -> None:
    sentence = about(told(BARRED, REDUCED), "reductions")
    assert sentence == (
        "Without barriers, 23 % still goes to waiting for reductions, mostly behind burn. With lag 0, dt makes every"
        " tile wait for the slowest one; lag 1 would let tiles run ahead, at a price."
    )


def test_several_reductions_without_lag() -> None:
    both = REDUCED.saying(notes={"lags": {"residual": 0, "dt": 0}})
    assert "With lag 0, residual and dt make every tile wait" in about(told(BARRED, both), "reductions")


def test_a_lagged_reduction_that_still_holds_tasks_back() -> None:
    sentence = about(told(BARRED, REDUCED.saying(notes={"lags": {"dt": 1}})), "reductions")
    assert sentence == "Without barriers, 23 % still goes to waiting for reductions, mostly behind burn."


def test_a_lag_of_zero_that_costs_nothing_is_not_mentioned() -> None:
    assert about(told(BARRED, FREE.saying(notes={"lags": {"dt": 0}})), "lag") == ""


def test_neighbours() -> None:
    sentence = about(told(BARRED, NEIGHBOURS), "neighbour")
    assert sentence == "Without barriers, 25 % goes to waiting for neighbour tiles, mostly for burn."
    assert about(told(BARRED, FREE), "neighbour") == ""


def test_unevenness_that_lasts_is_for_placement() -> None:
    """12 against 6 ms of work on two workers, the largest tile 8: the mean is 9."""
    sentence = about(told(BARRED, FREE), "Over the whole run")
    assert sentence == (
        "Over the whole run one worker has 1.33 times the mean work: unevenness that stays in place is cured by"
        " placement, not by tasks."
    )


def test_a_tile_that_outweighs_a_worker_is_for_smaller_tiles() -> None:
    """8 against 2 ms of work; the one tile with 8 is more than the mean of 5, whoever owns it."""
    spark = Drawn("0.0 |AAAAAAAA|\n1.0 |CC......|", extra={"stages": STAGES})
    sentence = about(told(BARRED, spark), "Over the whole run")
    assert sentence == (
        "Over the whole run one worker has 1.60 times the mean work: its busiest tile alone has more than that mean,"
        " which smaller tiles cure, and no order of tasks does."
    )


def test_unevenness_that_moves_is_not_for_placement() -> None:
    """Each worker has its turn with the hot tile."""
    moving = Drawn("0.0 |AAAAAAAABB|\n1.0 |CCDDDDDDDD|", "A>B, C>D", {"stages": STAGES})
    assert about(told(BARRED, moving), "placement") == ""


def test_a_worker_without_any_task_counts_in_the_mean() -> None:
    idle = Drawn("0.0 |AAAABBBB|\n1.0 |........|", "A>B", {"stages": STAGES})
    assert "one worker has 2.00 times the mean work" in about(told(BARRED, idle), "Over the whole run")


def test_a_dispatch_that_takes_much_says_so() -> None:
    """Half of each task is bookkeeping; a task takes 4 ms."""
    busy = Drawn("0.0 |aaAAbbBB|\n1.0 |ccCCddDD|", "A>B, C>D", {"stages": STAGES})
    sentence = about(told(BARRED, busy), "dispatch")
    assert sentence == (
        "The dispatch itself takes 50 % of the time; a step task lasts 4 ms on average. Use larger tiles before"
        " drawing conclusions"
        " about barriers."
    )


def test_a_dispatch_that_takes_little_is_said_without_advice_or_not_at_all() -> None:
    sentence = about(told(BARRED, REDUCED), "dispatch")
    assert sentence == "The dispatch itself takes 8 % of the time; a step task lasts 4.5 ms on average."
    assert about(told(BARRED, FREE), "dispatch") == ""


def test_heavier_reasons_come_first() -> None:
    text = """
    0.0 |aaaaaaaaAAAABBBB|
    1.0 |ccccccccCC..DDDD|
    """
    both = Drawn(text, "A>B, A>D, C>D", {"stages": STAGES})
    _, first, *others = told(BARRED, both)
    assert first.startswith("The dispatch itself takes 50 %")
    assert any(sentence.startswith("Without barriers, 6 %") for sentence in others)


def test_one_thread_explains_nothing() -> None:
    alone = Drawn("0.0 |AAAABBBB|", "A>B", {"stages": STAGES})
    assert told(replace(alone, facts={"mode": "lockstep", "barriers": ["burn"]}), alone) == [
        "On one thread nothing can wait for anything: use more workers to see what barriers cost."
    ]
