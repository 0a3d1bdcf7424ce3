"""Overrides: what a value may be, which paths exist, and what is said about those that do not."""

from __future__ import annotations

from typing import Any

import pytest

from breakstep.scenario.load import Scenario, scenario_from
from tests.unit.scenario.example import faults_of, tables


def loaded(*overrides: str) -> Scenario:
    return scenario_from(tables(), source="x", overrides=overrides)


@pytest.mark.parametrize(
    ("override", "path", "value"),
    [
        ("run.cycles=7", "run.cycles", 7),
        (" run.cycles = 7 ", "run.cycles", 7),
        ("run.end_time=2e-3", "run.end_time", 2e-3),
        ("run.fuse=false", "run.fuse", False),
        ("run.splitting=strang", "run.splitting", "strang"),
        ('run.splitting="lie"', "run.splitting", "lie"),
        ("title=Two words, and more", "title", "Two words, and more"),
        ("mesh.tile=[4, 4]", "mesh.tile", (4, 4)),
        ("mesh.tile.0=3", "mesh.tile", (3, 4)),
        ('mesh.edges.x=["outflow", "reflecting"]', "mesh.edges.x", ("outflow", "reflecting")),
        ("mesh.edges.y=outflow", "mesh.edges.y", ("outflow", "outflow")),
        ("transport.opacity.scattering=0.5", "transport.opacity.scattering", 0.5),
        ("initial.composition={C12 = 1.0}", "initial.composition", {"C12": 1.0}),
        ("initial.spots.0.temperature=2e9", "initial.spots.0.temperature", 2e9),
    ],
)
def test_a_value_arrives(override: str, path: str, value: Any) -> None:
    here: Any = loaded(override).file
    for step in path.split("."):
        here = here[int(step)] if step.isdecimal() else getattr(here, step)
    assert here == value


def test_values_within_a_free_table() -> None:
    file = loaded("initial.composition.He4=0.25", "initial.composition.O16=0.25").file
    assert file.initial.composition == {"He4": 0.25, "C12": 0.5, "O16": 0.25}  # type: ignore[union-attr]


def test_later_overrides_win() -> None:
    assert loaded("run.cycles=7", "run.cycles=8").run.cycles == 8


def test_a_table_that_the_file_does_not_have_is_made() -> None:
    plain = tables(transport=None)
    scenario = scenario_from(plain, source="x", overrides=["transport.groups=8"])
    assert scenario.file.transport is not None
    assert scenario.file.transport.groups == 8


def test_a_step_is_switched_off_and_on() -> None:
    assert loaded("hydro=false").file.hydro is None
    assert loaded("transport=false", "transport=true").file.transport is not None
    kept = loaded("transport=true").file.transport
    assert kept is not None
    assert kept.groups == 4  # the table's own keys stay


def test_another_kind_of_initial_state() -> None:
    table = "{kind = 'uniform', density = 1e6, temperature = 3e8, composition = {C12 = 1.0}}"
    assert loaded(f"initial={table}").file.initial.kind == "uniform"


@pytest.mark.parametrize(
    ("override", "sentence"),
    [
        ("mesh.zone=[1]", "--set: mesh.zone: unknown key; did you mean mesh.zones?"),
        ("mseh.zones=[1]", "--set: mseh.zones: unknown key; did you mean mesh?"),
        ("run.xyzzy=1", "--set: run.xyzzy: unknown key; known here: cycles, end_time, splitting"),
        ("initial.spots.0.radus=1", "--set: initial.spots.0.radus: unknown key; did you mean initial.spots"),
        ("initial.spots.3.radius=1", "--set: initial.spots.3: expected the number of an entry, from 0 to 0,"),
        ("initial.spots.x.radius=1", "--set: initial.spots.x: expected the number of an entry, from 0 to 0,"),
        ("initial.left.density=1", "--set: initial.left.density: unknown key"),
        ("mesh.tile.7=3", "--set: mesh.tile.7: expected the number of an entry, from 0 to 1, came 7"),
        ("run.cycles.x=3", "--set: run.cycles.x: run.cycles is 1, which has no keys"),
        ("run.cycles", "--set: run.cycles: expected key.path=value"),
        ("=3", "--set: =3: expected key.path=value"),
        ("run.cycles=", "--set: run.cycles: expected a TOML value or a bare word"),
        ("run.cycles=[1", "--set: run.cycles: expected a TOML value or a bare word, came"),
        ("run.cycles=3\nx=1", "--set: run.cycles: expected a TOML value or a bare word"),
        ("run.cycles=ten", '--set: run.cycles: expected a whole number, came "ten"'),
        ("time_step.cfl=nan", "--set: time_step.cfl: expected a finite number, came nan"),
    ],
)  # fmt: skip
def test_what_cannot_be_set(override: str, sentence: str) -> None:
    (fault,) = faults_of(tables(), override)
    assert fault.startswith(sentence)


def test_faults_of_overrides_and_of_the_file_come_together() -> None:
    spoilt = tables(title=3)
    faults = faults_of(spoilt, "mesh.zone=1", "run.cycles=0", "run.workers=3")
    assert faults == [
        "--set: mesh.zone: unknown key; did you mean mesh.zones?",
        "example.toml: title: expected text, came 3",
        "--set: run.cycles: expected a number of at least 1, came 0",
    ]


def test_the_tables_given_are_not_changed() -> None:
    given = tables(hydro=True)
    scenario_from(given, source="x", overrides=["run.cycles=7", "transport=false"])
    assert given == tables(hydro=True)


def test_a_resolved_scenario_can_be_overridden() -> None:
    resolved = loaded("transport=false").resolved()
    again = scenario_from(resolved, source="x", overrides=["transport.groups=8", "burning.sub_step_limit=9"])
    assert again.file.transport is not None
    assert again.file.transport.groups == 8
