"""Live bytes of drawn runs."""

from __future__ import annotations

from breakstep.profile.memory import live_bytes
from breakstep.profile.run import Profile
from tests.unit.profile.sketch import draw


def test_outputs_live_until_their_last_reader_ends() -> None:
    """A (100 bytes) is read by B and by C; B (10) by C; C (1) by none. D makes nothing.

    0.0 |AABBB....|
    1.0 |....CCCDD|
    """
    record = draw(
        test_outputs_live_until_their_last_reader_ends.__doc__,
        "A>B, A>C, B>C, C>D barrier",
        output={"A": 100, "B": 10, "C": 1},
    )
    live = Profile.from_record(record).live
    # at 7 C's output is there before A's and B's are freed; C lives to the run's end at 9
    assert list(live.total.items()) == [(2, 100), (5, 110), (7, 111), (7, 1), (9, 0)]
    assert live.peak_bytes == 111
    assert list(live.by_worker[0].items()) == [(2, 100), (5, 110), (7, 0)]
    assert list(live.by_worker[1].items()) == [(7, 1), (9, 0)]
    assert live.peak_by_worker == {0: 110, 1: 1}
    assert live.peak_by_kind == {"step": 111}


def test_kinds_of_tasks_are_told_apart() -> None:
    """P cuts 5 bytes out of A's 50.

    0.0 |AAPP..|
    1.0 |....BB|
    """
    record = draw(
        test_kinds_of_tasks_are_told_apart.__doc__,
        "A>P, P>B",
        kinds={"P": "pack"},
        output={"A": 50, "P": 5, "B": 50},
    )
    live = Profile.from_record(record).live
    assert live.peak_by_kind == {"step": 50, "pack": 5}
    assert live.peak_bytes == 55  # at 4, A's and P's, and again at 6, P's and B's


def test_a_reader_that_seems_to_end_early_frees_nothing_before_it_is_made() -> None:
    """On misaligned clocks B, which reads A, seems to end before A does.

    0.0 |AAAAAA|
    1.0 |BBB...|
    """
    record = draw(test_a_reader_that_seems_to_end_early_frees_nothing_before_it_is_made.__doc__, "A>B", output={"A": 8})
    assert list(live_bytes(Profile.from_record(record).frames).total.items()) == [(6, 8), (6, 0)]


def test_run_that_made_nothing() -> None:
    live = Profile.from_record(draw("0.0 |....|")).live
    assert live.peak_bytes == 0
    assert live.by_worker == {}
