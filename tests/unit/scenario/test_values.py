"""Each class of fault that a single key can have, alone and with others."""

from __future__ import annotations

import json
from typing import Any

import pytest

from breakstep.scenario.load import scenario_from
from tests.unit.scenario.example import changed, faults_of, tables, without

NAN, INFINITE = float("nan"), float("inf")

WRONG: list[tuple[str, Any, str]] = [
    # types
    ("run.cycles", 2.5, "run.cycles: expected a whole number, came 2.5"),
    ("run.cycles", 2.0, "run.cycles: expected a whole number, came 2.0"),
    ("run.cycles", True, "run.cycles: expected a whole number, came true"),
    ("run.cycles", "ten", 'run.cycles: expected a whole number, came "ten"'),
    ("run.fuse", 1, "run.fuse: expected true or false, came 1"),
    ("time_step.cfl", "0.4", 'time_step.cfl: expected a number, came "0.4"'),
    ("title", 3, "title: expected text, came 3"),
    ("mesh.zones", 12, "mesh.zones: expected a list, came 12"),
    ("mesh.zones", [12, "a"], 'mesh.zones.1: expected a whole number, came "a"'),
    ("mesh", 3, "mesh: expected a table, came 3"),
    ("hydro", 3, "hydro: expected a table, came 3"),
    ("initial", [], "initial: expected a table, came []"),
    ("initial.composition", 3, "initial.composition: expected a table, came 3"),
    ("initial.composition.He4", "half", 'initial.composition.He4: expected a number, came "half"'),
    ("initial.spots", 3, "initial.spots: expected a list of one or more tables, came 3"),
    ("initial.spots", [], "initial.spots: expected a list of one or more tables, came []"),
    ("initial.spots.0", 3, "initial.spots.0: expected a table, came 3"),
    # not finite
    ("mesh.size", [NAN, 1.0], "mesh.size.0: expected a finite number, came nan"),
    ("initial.density", INFINITE, "initial.density: expected a finite number, came inf"),
    ("initial.temperature", NAN, "initial.temperature: expected a finite number, came nan"),
    ("time_step.maximum", INFINITE, "time_step.maximum: expected a finite number, came inf"),
    # bounds
    ("initial.density", -1.0, "initial.density: expected a number above 0, came -1.0"),
    ("initial.temperature", -3e8, "initial.temperature: expected a number above 0, came -300000000.0"),
    ("initial.temperature", 0, "initial.temperature: expected a number above 0, came 0"),
    ("initial.spots.0.radius", 0.0, "initial.spots.0.radius: expected a number above 0, came 0.0"),
    ("initial.composition.He4", 1.5, "initial.composition.He4: expected a number of at most 1, came 1.5"),
    ("initial.velocity", [4e10], "initial.velocity.0: expected a number of at most 2.99792e+10"),
    ("mesh.zones", [0, 8], "mesh.zones.0: expected a number of at least 1, came 0"),
    ("mesh.zones", [], "mesh.zones: expected at least 1 entry, came 0"),
    ("mesh.zones", [4, 4, 4, 4], "mesh.zones: expected at most 3 entries, came 4"),
    ("time_step.cfl", 1.2, "time_step.cfl: expected a number of at most 0.9, came 1.2"),
    ("time_step.growth", 0.5, "time_step.growth: expected a number of at least 1, came 0.5"),
    ("transport.omega", 2.0, "transport.omega: expected a number below 2, came 2.0"),
    ("run.workers", 0, "run.workers: expected a number of at least 1, came 0"),
    ("run.end_time", 0.0, "run.end_time: expected a number above 0, came 0.0"),
    ("mesh.edges", {"x": ["outflow"]}, "mesh.edges.x: expected at least 2 entries, came 1"),
    # words
    ("name", "two words", "name: expected letters, digits and underscores"),
    ("run.splitting", "strnag", 'came "strnag"; did you mean strang?'),
    ("run.placement", "scattered", 'came "scattered"'),
    ("run.dispatch", 3, "run.dispatch: expected one of "),
    ("burning.network", "alpha", 'expected one of alpha13, came "alpha"; did you mean alpha13?'),
    ("mesh.edges", {"x": "periodc"}, 'came "periodc"; did you mean periodic?'),
    ("mesh.edges", {"x": ["outflow", "fixd"]}, 'mesh.edges.x.1: expected one of'),
    ("eos.kind", "stelar", 'expected one of gamma_law, stellar, came "stelar"; did you mean stellar?'),
    ("eos.kind", 1, "eos.kind: expected one of gamma_law, stellar, came 1"),
    ("initial.kind", "spot", "did you mean spots?"),
    # keys
    ("mesh.zone", [12], "mesh.zone: unknown key; did you mean zones?"),
    ("hdro", {}, "hdro: unknown key; did you mean hydro?"),
    ("eos.gamma", 1.4, "eos.gamma: unknown key; known here: kind, radiation"),
    ("hydro.limiter", "minmod", "hydro.limiter: unknown key"),
    ("initial.spots.0.radus", 1.0, "initial.spots.0.radus: unknown key; did you mean radius?"),
]  # fmt: skip


@pytest.mark.parametrize(("path", "value", "sentence"), WRONG)
def test_one_wrong_value_makes_one_fault(path: str, value: Any, sentence: str) -> None:
    faults = faults_of(changed(path, value))
    assert sentence in faults[0]
    assert faults[0].startswith("example.toml: ")
    assert len(faults) == 1


NEEDED = (
    "name mesh run eos initial mesh.zones mesh.size mesh.tile run.cycles eos.kind initial.kind"
    " initial.density initial.spots initial.spots.0.centre initial.spots.0.radius"
)


@pytest.mark.parametrize("path", NEEDED.split())
def test_a_missing_key_is_named_with_what_belongs_there(path: str) -> None:
    (fault,) = faults_of(without(path))
    assert fault.startswith(f"example.toml: {path}: is missing; expected ")


def test_a_huge_integer_is_no_crash() -> None:
    (fault,) = faults_of(changed("initial.density", 10**400))
    assert "initial.density: expected" in fault
    assert len(fault) < 200


def test_a_number_that_cannot_be_written_out() -> None:
    (fault,) = faults_of(changed("run.cycles", 16**5000))
    assert fault == "example.toml: run.cycles: expected a number of at most 1e+06, came a number of many digits"


def test_an_empty_file_names_every_missing_table() -> None:
    faults = faults_of({})
    for table in ("name", "mesh", "run", "eos", "initial"):
        assert any(f" {table}: is missing" in fault for fault in faults)


def test_all_faults_come_together_and_none_hides_another() -> None:
    spoilt = tables(title=7, hdro={}, eos={"kind": "stellar", "radiation": True})
    spoilt["mesh"]["zones"] = [12, 0]
    spoilt["run"]["splitting"] = "strnag"
    spoilt["time_step"] = {"cfl": 0.8, "lag": 1, "growth": 0.1}
    spoilt["initial"]["composition"]["He5"] = 0.5
    spoilt["initial"]["spots"].append({"centre": [1.0, 1.0], "radius": -1.0, "temperature": NAN})
    spoilt["transport"]["lowest_photon_energy"] = 1e6
    faults = faults_of(spoilt)
    keys = [fault.split(": ")[1] for fault in faults]
    assert sorted(keys) == sorted(
        [
            "title",
            "hdro",
            "mesh.zones.1",
            "run.splitting",
            "time_step.cfl",
            "time_step.growth",
            "initial.composition.He5",
            "initial.composition",
            "initial.spots.1.radius",
            "initial.spots.1.temperature",
            "transport.highest_photon_energy",
            "eos.radiation",
        ]
    )


def test_whole_numbers_may_stand_for_others() -> None:
    scenario = scenario_from(changed("initial.density", 1_000_000), source="x")
    assert scenario.file.initial.density == 1e6  # type: ignore[union-attr]


def test_one_word_stands_for_both_edges() -> None:
    spoilt = changed("mesh.edges", {"x": "outflow", "y": ["reflecting", "outflow"]})
    edges = scenario_from(spoilt, source="x").file.mesh.edges
    assert (edges.x, edges.y) == (("outflow", "outflow"), ("reflecting", "outflow"))


@pytest.mark.parametrize("step", ["hydro", "transport", "burning"])
def test_true_and_false_switch_a_step(step: str) -> None:
    assert getattr(scenario_from(tables(**{step: True}), source="x").file, step) is not None
    off = tables(**{step: False}, species={"network": "alpha13"} if step == "burning" else None)
    assert getattr(scenario_from(off, source="x").file, step) is None


def test_the_resolved_scenario_is_json_and_loads_as_the_same() -> None:
    scenario = scenario_from(tables(), source="x")
    resolved = json.loads(json.dumps(scenario.resolved()))
    assert resolved["time_step"]["growth"] == 1.25  # a default, filled in
    assert scenario_from(resolved, source="x").file == scenario.file
