"""Bytes held: each array once, however many hold it."""

from __future__ import annotations

import numpy as np

from breakstep.engine.resident.livebytes import LiveBytes


def test_an_array_counts_once_and_until_the_last_holder_lets_go() -> None:
    shared, own = np.zeros(4), np.zeros(10)
    live = LiveBytes()
    live.hold({"u": shared, "v": own})
    live.hold({"u": shared})
    assert live.now == 8 * 14
    live.let_go({"u": shared, "v": own})
    assert live.now == 8 * 4
    live.let_go({"u": shared})
    assert live.now == 0
    assert live.peak == 8 * 14


def test_equal_arrays_are_not_the_same_array() -> None:
    live = LiveBytes()
    live.hold({"u": np.zeros(4), "v": np.zeros(4)})
    assert live.now == 64


def test_what_moves_is_held_until_it_has_arrived() -> None:
    live = LiveBytes()
    live.move(100)
    live.move(-60)
    assert (live.now, live.moving, live.peak) == (40, 40, 100)
