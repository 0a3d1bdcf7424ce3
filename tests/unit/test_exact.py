"""The check that every recorded profile goes through finds what it is for."""

from __future__ import annotations

from pathlib import Path

import pytest

from breakstep.engine import recorded
from breakstep.profile.run import Profile
from tests.exact import check_recorded
from tests.unit.profile.sketch import draw, with_fields


def test_what_a_run_writes_comes_to_the_check(recorded_profiles: list[Profile], tmp_path: Path) -> None:
    profile = recorded.write_profile(with_fields(draw("0.0 |AAAA|")), tmp_path / "one")
    assert recorded_profiles == [profile]


def test_tasks_that_overlap_do_not_pass() -> None:
    """Two tasks on one thread at once."""
    with pytest.raises(AssertionError):
        check_recorded(Profile.from_record(draw("0.0 |AAAAAA....|\n0.0 |....BBBBBB|")))


def test_an_input_from_the_future_does_not_pass() -> None:
    """On one clock C cannot have started before A, which it needs, was done."""
    record = draw("0.0 |AAAAAA|\n1.0 |BBCCCC|", "A>C")
    with pytest.raises(AssertionError):
        check_recorded(Profile.from_record(record))
    record.manifest["clock"]["residual_ns"] = [0, 4]
    check_recorded(Profile.from_record(record))
