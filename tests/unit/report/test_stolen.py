"""Kernel time without a processor is said before anything else is made of the figures."""

from __future__ import annotations

from pathlib import Path

import pytest

from breakstep.profile.run import Profile
from breakstep.profile.store import read_profile
from breakstep.report.reasons import reasons

FOLDER = Path(__file__).parents[3] / "profiles" / "single_spark"


def with_cpu(mode: str, share: float) -> Profile:
    """The shipped profile as if its kernels had had the processor for a share of their time."""
    profile = read_profile(FOLDER / mode)
    work = profile.work.copy()
    work["cpu_ns"] = (share * work["compute_ns"]).astype("int64")
    profile.__dict__["work"] = work
    return profile


@pytest.mark.parametrize(("share", "is_said"), [(1.0, False), (0.95, False), (0.75, True)])
def test_stolen_time_is_said_when_it_is_much(share: float, is_said: bool) -> None:
    said = reasons(with_cpu("lockstep", share), with_cpu("tasked", share))
    assert any("no processor for 25 % of their time" in sentence for sentence in said) is is_said
