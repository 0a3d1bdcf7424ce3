"""Splittings: which order each cycle runs, and with which share of the time step."""

from __future__ import annotations

import pytest

from breakstep.errors import DeclarationError
from breakstep.steps.splitting import Item, Repeat, alternating, lie, strang
from tests.toys import Toy, dt_reduction

STEPS = Toy(repeats=False).steps()
SOLVE = Toy().steps()[-1]


def names(order: tuple[Item, ...]) -> list[str]:
    """What runs, in order."""
    return [item.name for item in order]


def test_lie_runs_each_step_once() -> None:
    splitting = lie(STEPS, [dt_reduction()])
    assert [names(order) for order in splitting.orders] == [["smooth", "drift", "grow", "trade", "blur"]]


def test_strang_runs_halves_forward_and_back_round_a_full_last_step() -> None:
    (order,) = strang([STEPS[0], STEPS[2], SOLVE], [dt_reduction()]).orders
    assert names(order) == ["smooth", "grow", "solve", "grow", "smooth"]
    shares = [item.fraction for item in order if not isinstance(item, Repeat)]
    assert shares == [0.5] * 4
    (full,) = strang([STEPS[2]], [dt_reduction()]).orders
    assert [item.fraction for item in full if not isinstance(item, Repeat)] == [1.0]


def test_a_strang_splitting_advances_each_step_by_a_whole_time_step() -> None:
    (order,) = strang(STEPS, [dt_reduction()]).orders
    for step in STEPS:
        shares = [item.fraction for item in order if item.name == step.name and not isinstance(item, Repeat)]
        assert sum(shares) == 1.0


def test_a_repeat_stands_last_in_a_strang_splitting() -> None:
    with pytest.raises(DeclarationError, match="repeat 'solve' must stand last"):
        strang([SOLVE, STEPS[0]])


def test_alternating_reverses_every_other_cycle_or_swaps_as_told() -> None:
    forward, backward = alternating(STEPS, [dt_reduction()]).orders
    assert names(backward) == list(reversed(names(forward)))
    _, swapped = alternating(STEPS, [dt_reduction()], swap=lambda s: [s[1], s[0], *s[2:]]).orders
    assert names(swapped) == ["drift", "smooth", "grow", "trade", "blur"]


def test_every_read_beyond_a_tile_is_listed_with_its_owner() -> None:
    found = [(owner, read.field, read.halo) for owner, read in Toy((12,)).splitting().halo_reads()]
    assert found == [
        ("smooth", "u", (1, 0, 0)),
        ("drift", "w", (3, 0, 0)),
        ("blur", "u", (1, 0, 0)),
        ("relax", "v", (1, 0, 0)),
    ]
