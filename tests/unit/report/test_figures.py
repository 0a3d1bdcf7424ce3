"""The same figures as data: keys that programs may rely on, and nothing that JSON cannot hold."""

from __future__ import annotations

import json
from typing import Any

import pytest

from breakstep.profile.ledger import ACCOUNTS
from breakstep.profile.run import Profile
from breakstep.report.comparison import (
    Comparison,
    Difference,
    compute_by,
    first_difference,
    first_traced_difference,
    run_figures,
)
from tests.unit.profile.sketch import draw, with_fields
from tests.unit.report.made import BARRED, FREE, compared

DOCUMENTED = {"scenario", "identical", "pairs", "workers", "gain", "lockstep", "tasked"}
BESIDE = {"difference", "threads", "dispatch"}
DOCUMENTED_OF_A_RUN = {
    "seconds",
    "tasks",
    "cycles",
    "core_seconds",
    "closure_error",
    "bytes_moved",
    "peak_bytes",
    "compute_by_step",
    "imbalance_by_step",
    "digest",
}
BESIDE_OF_A_RUN = {
    *("bytes_by_stage", "bytes_by_workers", "counters", "barriers", "status", "message"),
    *("efficiency", "critical_chain", "clock", "peak_bytes_by_data", "bytes_read"),
    *("attempts", "resumed_from_cycle", "rehearsal"),
}


def through_json(figures: Any) -> Any:
    """What a reader of the file gets; refuses NaN and infinities."""
    return json.loads(json.dumps(figures, allow_nan=False))


def test_the_keys_of_a_comparison() -> None:
    figures = through_json(compared(BARRED, FREE, (1.0, 1.01, 1.02)).as_json())
    assert set(figures) == DOCUMENTED | BESIDE
    assert set(figures["gain"]) == {"median", "low", "high", "significant", "ratios"}
    for mode in ("lockstep", "tasked"):
        assert set(figures[mode]) == DOCUMENTED_OF_A_RUN | BESIDE_OF_A_RUN
        assert tuple(figures[mode]["core_seconds"]) == ACCOUNTS
        assert set(figures[mode]["compute_by_step"]) == {"burn", "sweep_x"}
        assert set(figures[mode]["imbalance_by_step"]["burn"]) == {"workers", "tiles", "phases", "phases_weighted"}


def test_the_figures_of_a_comparison() -> None:
    figures = compared(BARRED, FREE, (1.0, 1.01, 1.02)).as_json()
    assert (figures["scenario"], figures["identical"], figures["difference"]) == ("drawn", True, None)
    assert (figures["pairs"], figures["workers"], figures["threads"]) == (3, 2, 2)
    assert figures["gain"]["median"] == pytest.approx(13.0 * 1.01 / 12.0, rel=1e-6)  # whole nanoseconds of 12 ms
    assert figures["gain"]["significant"] is True
    assert figures["tasked"]["seconds"] == pytest.approx(0.012)
    assert figures["tasked"]["core_seconds"]["unemployed"] == pytest.approx(0.006)
    assert figures["tasked"]["tasks"] == 4
    assert sum(figures["tasked"]["core_seconds"].values()) == pytest.approx(2 * 0.012)
    assert figures["tasked"]["closure_error"] == 0.0


def test_one_pair_has_null_for_an_interval() -> None:
    gain = through_json(compared(BARRED, FREE, (1.0,)).as_json())["gain"]
    assert (gain["low"], gain["high"], gain["significant"]) == (None, None, False)


def test_a_difference_is_data_too() -> None:
    figures = through_json(compared(BARRED, FREE, difference=Difference("gas", 3, "burn", 2)).as_json())
    assert figures["identical"] is False
    assert figures["difference"] == {"field": "gas", "tile": 3, "step": "burn", "cycle": 2}


def test_a_ratio_of_nothing_is_null() -> None:
    """A kernel of a task that belongs to no tile has no unevenness over tiles."""
    record = draw("0.0 |AAAA|\n0.1 |BBBB|")
    record.tasks.append((2, "combine", "dt", -1, 0, -1, 0, 0, 4, 6, 8, False))
    record.intervals.append((2, "kernel", "dt", 4, 6, 2))
    figures = through_json(run_figures(Profile.from_record(record)))
    assert figures["imbalance_by_step"]["dt"]["tiles"] is None
    assert figures["imbalance_by_step"]["dt"]["workers"] == 1.0


def test_a_run_without_any_task_has_figures() -> None:
    record = draw("0.0 |....|")
    record.manifest.update(status="failed", message="it failed at once")
    figures = through_json(run_figures(Profile.from_record(record)))
    assert (figures["seconds"], figures["tasks"], figures["status"]) == (0.0, 0, "failed")
    assert figures["message"] == "it failed at once"


def test_compute_by_worker_and_tile() -> None:
    profile = Profile.from_record(draw("0.0 |AAAabB|\n1.0 |.CC...|\n2.0 |......|"))
    assert compute_by(profile, "worker").to_dict() == {0: 4, 1: 2}
    assert compute_by(profile, "tile").to_dict() == {0: 3, 1: 1, 2: 2}


def test_equal_fields_have_no_difference_and_others_name_field_and_tile() -> None:
    one, same, other = FREE.profile(seed=1), FREE.profile(2.0, seed=1), FREE.profile(seed=2)
    assert first_difference(one, same) is None
    assert first_difference(one, other) == Difference("gas", 0)


def test_a_single_zone_in_its_last_bit_is_found() -> None:
    records = [with_fields(draw("0.0 |AAAA|")) for _ in range(2)]
    values = records[1].fields["radiation"].values
    values[2, 17, 0, 0] += 2.0**-53  # numbers below 1: their last bit or the one above
    assert first_difference(*(Profile.from_record(record) for record in records)) == Difference("radiation", 17)


def traced(checksums: dict[str, int]) -> Profile:
    """Tasks A, B and C of cycle 0, each with the checksum of one field."""
    record = draw("0.0 |AABBCC|", "A>B, B>C", stages={"A": "burn", "B": "sweep_x", "C": "dt"})
    for letter, checksum in checksums.items():
        step = {"A": "burn", "B": "sweep_x", "C": "dt"}[letter]
        record.counters.append(("ABC".index(letter), step, "checksum:gas", checksum))
        record.counters.append(("ABC".index(letter), step, "zones", 7))
    return Profile.from_record(record)


def test_the_first_differing_task_is_the_first_in_program_order() -> None:
    one, two = traced({"A": 1, "B": 2, "C": 3}), traced({"A": 1, "B": 5, "C": 6})
    assert first_traced_difference(one, two) == Difference("gas", 1, "sweep_x", 0)
    assert first_traced_difference(one, traced({"A": 1, "B": 2, "C": 3})) is None


def test_a_task_that_only_one_run_has_is_a_difference() -> None:
    assert first_traced_difference(traced({"A": 1, "B": 2}), traced({"A": 1})) == Difference("gas", 1, "sweep_x", 0)


def test_checksums_are_no_counters() -> None:
    assert run_figures(traced({"A": 1, "B": 2, "C": 3}))["counters"] == {
        "burn.zones": 7,
        "sweep_x.zones": 7,
        "dt.zones": 7,
    }


def test_comparisons_without_difference_are_identical() -> None:
    assert Comparison([BARRED.profile()], [FREE.profile()]).identical
