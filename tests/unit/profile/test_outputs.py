"""Live bytes by kind of data: each field of an output lives until its own last reader is done."""

from __future__ import annotations

from typing import Any

import pytest

from breakstep.profile.record import RunRecord
from breakstep.profile.run import Profile
from tests.unit.profile.sketch import draw

DATA: dict[str, Any] = {
    "fields": {
        "gas": {"components": 2, "per_tile": False, "scratch": False},
        "matrix": {"components": 10, "per_tile": False, "scratch": True},
        "verdict": {"components": 1, "per_tile": True, "scratch": True},
    },
    "stages": {
        "build": {"reads": {"gas": {"halo": [0, 0, 0]}}, "writes": ["gas", "matrix", "verdict"]},
        "solve": {"reads": {"matrix": {"halo": [0, 0, 0]}}, "writes": []},
        "look": {"reads": {"gas": {"halo": [0, 0, 0]}}, "writes": []},
        "relax": {"reads": {"gas": {"halo": [1, 0, 0]}}, "writes": ["gas"]},
    },
    "periodic": [False, False, False],
}
BUILT = 8 * (2 + 10 + 1)  # of a tile of one zone [bytes]


def told(record: RunRecord, tile: int = 0, skipped: str = "") -> Profile:
    """The profile of a run that says what its stages read and write, all of whose step tasks are of one tile."""
    record.manifest["notes"]["data"] = DATA
    record.tasks._rows = [
        (*row[:3], tile if row[1] == "step" else -1, *row[4:11], chr(65 + row[0]) in skipped)
        for row in record.tasks._rows
    ]
    return Profile.from_record(record)


def ends(profile: Profile, data: str) -> list[tuple[int, int]]:
    return [(int(moment), int(level)) for moment, level in profile.live.by_data[data].items()]


def test_every_field_has_its_own_last_reader() -> None:
    """A builds all three, B reads the matrix, C the gas, which is final; nobody reads the verdict.

    0.0 |AABBCC..|
    1.0 |......DD|
    """
    text = test_every_field_has_its_own_last_reader.__doc__
    stages = {"A": "build", "B": "solve", "C": "look", "D": "look"}
    profile = told(draw(text, "A>B, A>C", stages=stages, output={"A": BUILT}))
    assert ends(profile, "matrix") == [(2, 80), (4, 0)]
    assert ends(profile, "gas") == [(2, 16), (8, 0)]
    assert ends(profile, "verdict") == [(2, 8), (2, 0)]
    assert list(profile.live.total.items()) == [(2, 104), (2, 96), (4, 16), (8, 0)]
    assert profile.live.peak_by_data == {"gas": 16, "matrix": 80, "verdict": 8}


def test_a_version_that_is_replaced_goes_with_its_last_reader() -> None:
    """B replaces A's gas, and is the last that reads it.

    0.0 |AABB..|
    0.1 |....CC|
    """
    text = test_a_version_that_is_replaced_goes_with_its_last_reader.__doc__
    stages = {"A": "relax", "B": "relax", "C": "solve"}
    profile = told(draw(text, "A>B", stages=stages, output={"A": 16, "B": 16}))
    assert ends(profile, "gas") == [(2, 16), (4, 32), (4, 16), (6, 0)]


def test_what_is_handed_on_lives_as_long_as_its_readers() -> None:
    """B and C have converged and hand A's gas on; D reads it, and then replaces it.

    0.0 |AAbcDDEE|
    """
    text = test_what_is_handed_on_lives_as_long_as_its_readers.__doc__
    stages = {"A": "relax", "B": "relax", "C": "relax", "D": "relax", "E": "solve"}
    record = draw(text, "A>B, B>C, C>D", stages=stages, output={"A": 16, "D": 16})
    assert ends(told(record, skipped="BC"), "gas") == [(2, 16), (6, 32), (6, 16), (8, 0)]


def test_what_the_last_iteration_hands_on_is_final() -> None:
    """A's gas is the final one, since B only hands it on.

    0.0 |AAbCC|
    """
    stages = {"A": "relax", "B": "relax", "C": "solve"}
    record = draw(test_what_the_last_iteration_hands_on_is_final.__doc__, "A>B", stages=stages, output={"A": 16})
    assert ends(told(record, skipped="B"), "gas") == [(2, 16), (5, 0)]


def test_rims_and_values_are_kinds_of_their_own() -> None:
    """P cuts rims out of A's gas for B, R adds up what A gives.

    0.0 |AAPPrr..|
    1.0 |......BB|
    """
    record = draw(
        test_rims_and_values_are_kinds_of_their_own.__doc__,
        "A>P, P>B, A>R reduction, R>B reduction",
        kinds={"P": "pack", "R": "combine"},
        stages={"A": "relax", "B": "relax", "P": "relax", "R": "dt"},
        output={"A": 16, "P": 4, "R": 1, "B": 16},
    )
    profile = told(record)
    assert ends(profile, "rims") == [(4, 4), (8, 0)]
    assert ends(profile, "values") == [(6, 1), (8, 0)]
    assert ends(profile, "gas") == [(2, 16), (4, 0), (8, 16), (8, 0)]


@pytest.mark.parametrize(("dispatch", "size"), [("native", BUILT), ("drawn", BUILT - 1)])
def test_an_output_that_cannot_be_told_apart_stays_whole(dispatch: str, size: int) -> None:
    """Natively an output is one object; and a size that does not add up is not explained away.

    0.0 |AABBCC|
    """
    text = test_an_output_that_cannot_be_told_apart_stays_whole.__doc__
    record = draw(text, "A>B", stages={"A": "build", "B": "solve", "C": "look"}, output={"A": size})
    record.manifest["dispatch"] = dispatch
    profile = told(record)
    assert ends(profile, "outputs") == [(2, size), (4, 0)]
    assert set(profile.live.by_data) == {"outputs"}
