"""Whatever stands in a file, it loads or it is refused in sentences; nothing else ever escapes."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import suppress
from typing import Any

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from breakstep.errors import ScenarioError
from breakstep.scenario.load import Scenario, scenario_from
from tests.unit.scenario.example import changed, tables


def paths(table: Any, above: str = "") -> Iterator[str]:
    """Every path into nested tables and lists."""
    entries = table.items() if isinstance(table, dict) else enumerate(table)
    for key, value in entries:
        path = f"{above}.{key}" if above else str(key)
        yield path
        if isinstance(value, dict | list):
            yield from paths(value, path)


EXTREMES = st.sampled_from([0, -1, 10**400, -(10**400), 1e308, -1e308, 5e-324, 1e-300, True, "", "x"])
LEAVES = EXTREMES | st.integers() | st.floats() | st.text(max_size=5) | st.booleans() | st.datetimes()
VALUES = st.recursive(
    LEAVES,
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=5), inner, max_size=3),
    max_leaves=6,
)
PATHS = st.sampled_from([*paths(tables()), "fixed", "fixed.x_low", "species", "mesh.edges.x", "new", "run.new"])


def load_or_refuse(spoilt: dict[str, Any], *overrides: str) -> None:
    faults: list[str] = []
    scenario: Scenario | None = None
    try:
        scenario = scenario_from(spoilt, source="example.toml", overrides=overrides)
    except ScenarioError as refusal:
        faults = refusal.details["faults"]
    assert (scenario is None) == bool(faults)
    assert all(len(fault) < 400 for fault in faults)
    if scenario is not None:
        first_tile_is_sound(scenario)


def first_tile_is_sound(scenario: Scenario) -> None:
    """What is let through must have an initial state."""
    problem = scenario.problem()
    tile = problem.cut(scenario.tile).tiles[0]
    if tile.zones < 10_000:
        assert all(np.isfinite(array).all() for array in problem.initial(tile, problem.mesh).values())


@settings(max_examples=300, deadline=None)  # compiling the first time takes longer than any deadline
@given(PATHS, VALUES)
def test_any_value_anywhere(path: str, value: Any) -> None:
    load_or_refuse(changed(path, value))


@settings(max_examples=100, deadline=None)
@given(st.dictionaries(st.sampled_from([*tables(), "fixed", "species"]), VALUES))
def test_any_tables(spoilt: dict[str, Any]) -> None:
    load_or_refuse(spoilt)


@settings(max_examples=200, deadline=None)
@given(PATHS, st.text(max_size=8) | st.sampled_from(["1", "nan", "[1]", "true", "{}", "1e999", "[{}]"]))
def test_any_override(path: str, text: str) -> None:
    load_or_refuse(tables(), f"{path}={text}")


@settings(max_examples=100, deadline=None)
@given(st.text(max_size=20))
def test_any_text_as_an_override(text: str) -> None:
    with suppress(ScenarioError):
        scenario_from(tables(), source="example.toml", overrides=[text])
