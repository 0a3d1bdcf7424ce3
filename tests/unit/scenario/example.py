"""A small sound scenario as tables, for tests to spoil."""

from __future__ import annotations

import copy
from typing import Any

import pytest

from breakstep.errors import ScenarioError
from breakstep.scenario.load import scenario_from

_SOUND: dict[str, Any] = {
    "name": "example",
    "mesh": {"zones": [12, 8], "size": [1.2e5, 8e4], "tile": [6, 4]},
    "run": {"cycles": 1},
    "time_step": {"maximum": 1e-6},
    "eos": {"kind": "stellar", "radiation": False},
    "hydro": {},
    "transport": {"groups": 4, "opacity": {"absorption": 1e-8}},
    "burning": {},
    "initial": {
        "kind": "spots",
        "density": 1e6,
        "temperature": 3e8,
        "composition": {"He4": 0.5, "C12": 0.5},
        "spots": [{"centre": [3e4, 4e4], "radius": 3e4, "temperature": 1e9}],
    },
}
"""Everything at once: all three steps, every kind of table."""


def tables(**changes: Any) -> dict[str, Any]:
    """The sound scenario with some top-level keys replaced; None takes a key out."""
    made = {**copy.deepcopy(_SOUND), **changes}
    return {key: value for key, value in made.items() if value is not None}


def changed(path: str, value: Any) -> dict[str, Any]:
    """The sound scenario with one value replaced or added."""
    made = tables()
    *steps, last = path.split(".")
    here: Any = made
    for step in steps:
        here = here[int(step)] if isinstance(here, list) else here.setdefault(step, {})
    here[int(last) if isinstance(here, list) else last] = value
    return made


def without(path: str) -> dict[str, Any]:
    """The sound scenario with one key taken out."""
    made = tables()
    *steps, last = path.split(".")
    here: Any = made
    for step in steps:
        here = here[int(step)] if isinstance(here, list) else here[step]
    del here[last]
    return made


def faults_of(spoilt: dict[str, Any], *overrides: str) -> list[str]:
    """The sentences with which a scenario is refused."""
    with pytest.raises(ScenarioError) as refused:
        scenario_from(spoilt, source="example.toml", overrides=overrides)
    faults = refused.value.details["faults"]
    assert refused.value.message == "\n".join(faults)
    return list(faults)
