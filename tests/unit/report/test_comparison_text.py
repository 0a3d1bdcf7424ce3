"""What ``compare`` prints: short, narrow, and true to the figures of runs drawn by hand."""

from __future__ import annotations

import re

import pytest

from breakstep.report.comparison import Comparison, Difference
from breakstep.report.terminal import LINES, comparison_lines, headline
from tests.unit.report.made import BARRED, EVEN, EVEN_BARRED, FREE, NEIGHBOURS, REDUCED, Drawn, compared

LONG_NAME = "a_scenario_whose_name_is_as_long_as_a_scenario_s_name_may_be"
MANY = ["sweep_x", "sweep_y", "sweep_z", "burn", "solve", "dt"]
GAIN = compared(BARRED, FREE, (1.0, 1.01, 1.02))
NO_GAIN = compared(EVEN_BARRED, EVEN, (1.0, 0.995, 1.01))
LOSS = compared(EVEN_BARRED, EVEN, (0.9, 0.89, 0.91))
WIDE = compared(EVEN_BARRED, EVEN, (0.7, 1.1, 1.6))
ONE_PAIR = compared(BARRED, FREE, (1.0,))
DIFFERS = compared(BARRED, REDUCED, (1.0, 1.0), Difference("gas", 3, "burn", 2))
PARTLY = compared(BARRED.saying(mode="burn", barriers=["burn"]), FREE)
TWO_OF_MANY = compared(BARRED.saying(mode="burn,dt", barriers=["burn", "dt"]), NEIGHBOURS)
ITSELF = compared(EVEN, EVEN, (1.0, 0.99, 1.02))
CROWDED = compared(
    BARRED.saying(mode=",".join(MANY), barriers=MANY, scenario={"name": LONG_NAME}, workers=2),
    REDUCED.saying(scenario={"name": LONG_NAME}),
    (1.0, 1.1, 1.3),
    Difference("radiation", 123456, "step_with_a_long_name", 1234),
)
ALL = {name: value for name, value in globals().items() if isinstance(value, Comparison)}


def text(comparison: Comparison) -> str:
    """All lines as one, words apart by one space."""
    return " ".join(" ".join(comparison_lines(comparison)).split())


@pytest.mark.parametrize("name", sorted(ALL))
def test_it_fits_a_terminal(name: str) -> None:
    lines = comparison_lines(ALL[name])
    assert len(lines) <= LINES == 25
    assert max(map(len, lines)) <= 80
    assert not any(line.endswith(" ") for line in lines)


@pytest.mark.parametrize("name", sorted(ALL))
def test_singular_and_plural(name: str) -> None:
    assert not re.search(r"\b1 (workers|threads|pairs|barriers|cycles|tasks|transfers)\b", text(ALL[name]))


def test_a_gain_is_said_in_core_seconds_of_every_hundred() -> None:
    """13 ms against 12 ms, the lockstep runs 0, 1 and 2 % slower: 1 - 12 / (13 x 1.01) = 8.6 %."""
    assert headline(GAIN) == "drawn: leaving lockstep hands back 8.6 of every 100 core-seconds."
    assert "3 pairs: 13.1 ms lockstep, 12 ms tasked; median gain 1.09, 95 % interval 1.07 to 1.12" in text(GAIN)
    assert "Same bits in all runs." in text(GAIN)


def test_no_gain_is_no_gain() -> None:
    assert headline(NO_GAIN) == "drawn: leaving lockstep buys nothing that stands out from the noise."
    assert "95 % interval 0.98 to 1.02" in text(NO_GAIN)


def test_a_wide_interval_asks_for_more_pairs() -> None:
    assert headline(WIDE).endswith("nothing that stands out from the noise; more --pairs would narrow the interval.")


def test_a_loss_is_called_a_cost() -> None:
    """Tasked takes 12 ms where lockstep takes 10.8 ms: 1 / 0.9 - 1 = 11.1 %."""
    assert headline(LOSS) == "drawn: leaving lockstep costs 11.1 core-seconds more for every 100."


def test_one_pair_is_never_called_a_gain_nor_noise() -> None:
    assert headline(ONE_PAIR) == "drawn: one pair cannot say whether leaving lockstep pays; use --pairs 3 or more."
    assert "1 pair: 13 ms lockstep, 12 ms tasked; gain 1.08, one pair has no interval." in text(ONE_PAIR)


def test_a_difference_comes_first_and_nothing_claims_equal_bits() -> None:
    assert headline(DIFFERS) == (
        "drawn: the runs do NOT end with the same bits; they differ first in gas after step burn on tile 3 in cycle 2."
    )
    assert "Same bits" not in text(DIFFERS)


def test_a_difference_that_was_not_traced() -> None:
    found = headline(compared(BARRED, FREE, difference=Difference("gas", 3)))
    assert "field gas differs at the end, first on tile 3; a traced second run did not show where it began" in found


def test_the_barriers_that_were_compared_are_named() -> None:
    assert headline(PARTLY) == "drawn: leaving out the barrier burn hands back 7.7 of every 100 core-seconds."
    lines = comparison_lines(PARTLY)
    assert any(line.split()[:2] == ["core-seconds", "1"] and "1 barrier  " in line for line in lines)
    assert "13 ms with the barrier burn, 12 ms tasked" in text(PARTLY)
    assert "lockstep" not in text(PARTLY)
    assert "leaving out the barriers burn and dt" in headline(TWO_OF_MANY)
    assert "Why: with the barriers burn and dt cores waited" in text(TWO_OF_MANY)


def test_tasked_against_itself_is_a_check_of_the_measurement() -> None:
    assert headline(ITSELF) == "drawn: tasked against tasked shows no difference beyond noise, as it should."
    assert "Why: " not in text(ITSELF)
    drifting = headline(compared(EVEN, EVEN, (1.1, 1.11, 1.12)))
    assert drifting == "drawn: tasked against tasked differs by 11.0 %; trust no gain of that size."


def test_the_table_adds_up() -> None:
    """Each column of accounts sums to its last line, in the digits shown."""
    rows = [line for line in comparison_lines(GAIN)[3:] if line and not line.startswith(" ")]
    accounts, total = rows[1:9], rows[9]
    left = sum(float(line[24:34]) for line in accounts)
    right = sum(float(line[41:52]) for line in accounts)
    back = sum(float(line[59:74]) for line in accounts)
    # eight accounts, each rounded to the 4th decimal: half a unit each
    assert left == pytest.approx(float(total[24:34]), abs=8 * 0.5e-4)
    assert right == pytest.approx(float(total[41:52]), abs=8 * 0.5e-4)
    assert back == pytest.approx(left - right, abs=8 * 0.5e-4)
    assert not any("miss threads x time" in line for line in rows)


def test_the_shown_pair_is_the_one_with_the_median_gain() -> None:
    comparison = compared(BARRED, FREE, (1.2, 1.0, 1.1))
    assert comparison.shown == (comparison.lockstep[2], comparison.tasked[2])
    assert comparison.shown[0].ledger.span_ns == pytest.approx(1.1 * 13e6, abs=1)  # moments are whole nanoseconds


def test_a_run_of_large_numbers_keeps_its_columns() -> None:
    """Ten million core-seconds are a month of four cores."""
    big = 1e6 * 0.4e3  # 13 characters of this many milliseconds: 5.2e6 s
    comparison = Comparison([BARRED.profile(big)], [FREE.profile(big)])
    assert max(map(len, comparison_lines(comparison))) <= 100


def test_an_account_below_the_line_is_still_in_the_table() -> None:
    names = ("compute", "wait: neighbour tile", "wait: reduction", "wait: barrier", "bytes, ghost zones")
    lines = comparison_lines(CROWDED)
    for name in (*names, "dispatch (engine)", "out of work"):
        assert any(line.startswith(name) for line in lines)


def test_drawings_are_what_they_claim() -> None:
    """The figures that the other tests rest on, counted off the drawings."""

    def seconds(drawn: Drawn) -> dict[str, float]:
        return {k: round(v * 1e3) for k, v in drawn.profile().ledger.accounts_seconds.items() if v}

    assert seconds(BARRED) == {"compute": 18, "barrier": 6, "engine": 2}
    assert seconds(FREE) == {"compute": 18, "unemployed": 6}
    assert seconds(REDUCED) == {"compute": 18, "reduction": 6, "engine": 2}
    assert seconds(NEIGHBOURS) == {"compute": 18, "neighbour": 6}
