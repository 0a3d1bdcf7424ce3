"""What ``advise`` says about reductions that tie the cycles together, and about advice that was tried."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from breakstep.commands.verify import figures_of
from breakstep.forecast.advice import Advice, Trial
from breakstep.report.forecast import recorded_sentence, tie_sentence, verify_lines

TIE = {
    "reductions_limit_gain": True,
    "lockstep_s": 4.0,
    "barriers_gain_s": 0.1,
    "held_by_reductions_s": 0.9,
    "later_reductions_gain_s": 0.7,
    "all_gain_s": 0.8,
    "gain_without_reductions_s": 1.0,
}


def test_reductions_that_tie_are_told_with_figures() -> None:
    told = tie_sentence(TIE)
    assert "Removing all barriers alone gains 0.100 s of 4.00 s: little" in told
    assert "still tie the cycles together, and hold back another 0.900 s" in told
    assert "would bring 0.700 s more" in told
    assert "would cost 0.200 s on balance" in tie_sentence(TIE | {"later_reductions_gain_s": -0.2})


def test_reductions_that_do_not_tie_are_told_as_well() -> None:
    told = tie_sentence(TIE | {"reductions_limit_gain": False, "held_by_reductions_s": 0.01})
    assert "they are not what ties the cycles together" in told


def tried(before: list[float], after: list[float]) -> dict[str, Any]:
    """Advice that should gain 0.5 s of 5 s, from 0.3 to 0.7, and what was measured."""
    advice = Advice("try it", "lockstep", 5.0, 0.5, 0.3, 0.7, 0, 0, "the same", Trial(), Trial())
    return figures_of(advice, np.array(before), np.array(after))


@pytest.mark.parametrize(
    ("before", "after", "verdict"),
    [
        ([5.0, 5.1, 4.9], [4.5, 4.6, 4.5], "lies within"),
        ([10.0, 10.2, 9.8], [9.0, 9.2, 9.0], "lies within"),  # a machine half as fast today
        ([5.0, 5.01, 5.0], [5.0, 5.0, 5.0], "do not meet"),
        ([5.0, 9.0, 5.5], [5.2, 5.0, 8.0], "too restless"),
    ],
)
def test_what_was_tried_is_judged_as_a_share_of_the_time(before: list[float], after: list[float], verdict: str) -> None:
    assert verdict in " ".join(" ".join(verify_lines(tried(before, after))).split())


def test_nothing_tried_says_nothing() -> None:
    assert verify_lines(None) == []


def test_without_a_comparable_run_the_error_is_unknown() -> None:
    assert "No run with all barriers or none" in recorded_sentence({})
