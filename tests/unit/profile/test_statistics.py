"""Gains of repeated pairs, against scipy.stats and printed tables."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from breakstep.errors import PairsError
from breakstep.profile.statistics import gain_of_pairs

#: Student's t at 0.975 for 1, 2, 4, 9 and 30 degrees of freedom: Abramowitz and Stegun (1964), table 26.10,
#: from memory; printed to three decimals.
T_975 = {1: 12.706, 2: 4.303, 4: 2.776, 9: 2.262, 30: 2.042}


@pytest.mark.parametrize("pairs", [2, 3, 5, 10, 31])
def test_interval_is_that_of_a_one_sample_t_test_on_logarithms(pairs: int) -> None:
    numbers = np.random.default_rng(pairs)
    lockstep, tasked = 10 + numbers.random(pairs), 9 + numbers.random(pairs)
    gain = gain_of_pairs(list(lockstep), list(tasked))
    test = stats.ttest_1samp(np.log(lockstep / tasked), 0.0)
    expected = np.exp(test.confidence_interval(0.95))
    # two routes to the same quantile and logarithms; both are good to some 1e-14
    assert (gain.low, gain.high) == pytest.approx(tuple(expected), rel=1e-12)
    assert gain.significant == (test.pvalue < 0.05)
    assert gain.median == pytest.approx(np.median(lockstep / tasked), rel=1e-14)
    assert gain.geometric_mean == pytest.approx(stats.gmean(lockstep / tasked), rel=1e-14)
    assert gain.degrees == pairs - 1
    assert gain.ratios == pytest.approx(tuple(lockstep / tasked), rel=1e-14)


@pytest.mark.physics
@pytest.mark.parametrize("degrees", T_975)
def test_half_width_uses_the_tabled_quantile(degrees: int) -> None:
    """Logarithms that alternate between two values: the half width is t s / sqrt(n)."""
    ratios = [math.exp(0.01 * (-1) ** i) for i in range(degrees + 1)]
    gain = gain_of_pairs(ratios, [1.0] * len(ratios))
    assert gain.low is not None
    assert gain.high is not None
    scatter = np.std(np.log(ratios), ddof=1) / math.sqrt(degrees + 1)
    # the table is rounded to half a unit of its third decimal
    assert math.log(gain.high / gain.low) / 2 / scatter == pytest.approx(T_975[degrees], abs=5e-4)


def test_a_steady_gain_is_significant_and_a_wavering_one_is_not() -> None:
    assert gain_of_pairs([1.20, 1.21, 1.19], [1.0, 1.0, 1.0]).significant
    assert not gain_of_pairs([1.4, 1.0, 1.2], [1.0, 1.0, 1.0]).significant


def test_a_loss_is_significant_too() -> None:
    gain = gain_of_pairs([1.0, 1.0, 1.0], [1.20, 1.21, 1.19])
    assert gain.significant
    assert gain.high is not None
    assert gain.high < 1.0


def test_exchanging_the_modes_gives_the_reciprocal() -> None:
    there, back = (
        gain_of_pairs([3.0, 2.0, 2.5], [2.0, 1.8, 2.1]),
        gain_of_pairs([2.0, 1.8, 2.1], [3.0, 2.0, 2.5]),
    )
    assert there.low is not None
    assert back.high is not None
    assert there.low * back.high == pytest.approx(1.0, rel=1e-14)
    assert there.median * back.median == pytest.approx(1.0, rel=1e-14)


def test_lockstep_against_itself_is_no_gain() -> None:
    gain = gain_of_pairs([2.0, 3.0, 4.0], [2.0, 3.0, 4.0])
    assert (gain.median, gain.low, gain.high, gain.significant) == (1.0, 1.0, 1.0, False)


def test_one_pair_has_no_interval() -> None:
    gain = gain_of_pairs([20.0], [1.0])
    assert (gain.low, gain.high, gain.significant, gain.degrees) == (None, None, False, 0)
    assert gain.median == pytest.approx(20.0, rel=1e-14)


def test_limits_of_few_pairs_as_documented() -> None:
    """Half widths in standard deviations: 2.48, 1.24 and 0.72 for 3, 5 and 10 pairs."""
    for pairs, factor in ((3, 2.48), (5, 1.24), (10, 0.72)):
        assert stats.t.ppf(0.975, pairs - 1) / math.sqrt(pairs) == pytest.approx(factor, abs=0.005)


def test_coverage_at_three_pairs() -> None:
    """Of 4000 comparisons without a gain, one in twenty is called significant: 200, give or take 14."""
    numbers = np.random.default_rng(11)
    walls = np.exp(0.02 * numbers.standard_normal((4000, 2, 3)))
    called = sum(gain_of_pairs(list(pair[0]), list(pair[1])).significant for pair in walls)
    assert abs(called - 200) < 3 * 14


@pytest.mark.parametrize(
    ("lockstep", "tasked", "message"),
    [
        ([], [], "as many lockstep as tasked runs, one at least, not 0 and 0"),
        ([1.0, 2.0], [1.0], "as many lockstep as tasked runs, one at least, not 2 and 1"),
        ([1.0, 0.0], [1.0, 1.0], "lockstep run 2: expected a positive wall time in seconds, not 0.0"),
        ([1.0], [math.nan], "tasked run 1: expected a positive wall time in seconds, not nan"),
        ([math.inf], [1.0], "lockstep run 1: expected a positive wall time in seconds, not inf"),
    ],
)
def test_bad_pairs(lockstep: list[float], tasked: list[float], message: str) -> None:
    with pytest.raises(PairsError, match=message):
        gain_of_pairs(lockstep, tasked)
