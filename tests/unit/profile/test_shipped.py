"""The small profile that comes with the project: recorded once, readable for good."""

from __future__ import annotations

from pathlib import Path

import pytest

from breakstep.profile.run import Profile
from breakstep.profile.store import read_profile
from breakstep.report.comparison import Comparison

FOLDER = Path(__file__).parents[3] / "profiles" / "single_spark"


@pytest.fixture(scope="module")
def profiles() -> tuple[Profile, Profile]:
    return read_profile(FOLDER / "lockstep"), read_profile(FOLDER / "tasked")


def test_both_modes_are_complete_and_end_in_the_same_bits(profiles: tuple[Profile, Profile]) -> None:
    lockstep, tasked = profiles
    assert lockstep.manifest["status"] == tasked.manifest["status"] == "complete"
    assert lockstep.manifest["digest"] == tasked.manifest["digest"]
    assert lockstep.manifest["barriers"]
    assert not tasked.manifest["barriers"]


def test_every_nanosecond_is_booked_once(profiles: tuple[Profile, Profile]) -> None:
    for profile in profiles:
        assert sum(profile.ledger.accounts_ns.values()) == profile.ledger.threads * profile.ledger.span_ns


def test_only_lockstep_waits_at_barriers_and_the_spark_is_the_reason(profiles: tuple[Profile, Profile]) -> None:
    lockstep, tasked = profiles
    assert tasked.ledger.accounts_ns["barrier"] == 0 < lockstep.ledger.accounts_ns["barrier"]
    assert lockstep.work["compute_ns"].idxmax() == "burn"
    assert lockstep.imbalance["tiles"]["burn"] > 2.0  # one of four tiles holds the spark: 4 if it did all the work


def test_mass_fractions_of_the_final_state_sum_to_one(profiles: tuple[Profile, Profile]) -> None:
    for profile in profiles:
        gas = profile.fields["gas"].to_numpy()
        # 13 additions of numbers below 1, after a few cycles of fluxes scaled to the mass flux
        assert abs(gas[5:].sum(axis=0) / gas[0] - 1.0).max() < 1e-12


def test_a_comparison_can_be_made_from_it_long_after(profiles: tuple[Profile, Profile]) -> None:
    figures = Comparison([profiles[0]], [profiles[1]]).as_json()
    assert figures["identical"]
    assert figures["scenario"] == "single_spark"
    assert figures["lockstep"]["tasks"] > figures["tasked"]["tasks"]  # the barriers' own tasks
