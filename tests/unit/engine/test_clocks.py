"""Clocks: the same machine shares one; another's offset comes from the shortest round trip."""

from __future__ import annotations

import time

from breakstep.engine import clocks
from breakstep.engine.clocks import EXCHANGES, clock, read_clock


def test_the_same_machine_shares_one_clock() -> None:
    asked = []

    def ask() -> tuple[int, str, int]:
        asked.append(1)
        return clock()

    reading = read_clock(ask)
    if clock()[1]:  # the boot is known
        assert (reading.offset, reading.residual, len(asked)) == (0, 0, 1)
    assert reading.cpu > 0


def test_another_machine_s_offset_is_right_to_within_its_residual() -> None:
    """Its clock runs 7 s ahead; some answers come back late, one promptly."""
    ahead, calls = 7_000_000_000, []

    def ask() -> tuple[int, str, int]:
        calls.append(1)
        there = time.perf_counter_ns() + ahead
        if len(calls) != 5:
            time.sleep(0.002)
        return there, "another boot", 11

    reading = read_clock(ask)
    assert len(calls) == EXCHANGES
    assert abs(reading.offset - ahead) <= reading.residual
    assert reading.residual < 1_000_000  # half of a trip of 2 ms would be 1 ms; the prompt one took microseconds
    assert reading.cpu == 11


def test_workers_are_asked_one_by_one() -> None:
    class FakeClient:
        def run(self, function: object, workers: list[str]) -> dict[str, object]:
            assert function is clock
            return {workers[0]: clock()}

    readings = clocks.read_clocks(FakeClient(), ["a", "b"])
    assert len(readings) == 2
