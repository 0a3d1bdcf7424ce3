"""Each rule that ties keys together: broken it speaks, kept it is silent."""

from __future__ import annotations

from typing import Any

import pytest

from breakstep.scenario.load import scenario_from
from tests.unit.scenario.example import changed, faults_of, tables

TUBE: dict[str, Any] = {
    "name": "tube",
    "mesh": {"zones": [16], "size": [1.0], "tile": [8], "edges": {"x": "outflow"}},
    "run": {"cycles": 1},
    "eos": {"kind": "gamma_law", "gamma": 1.4},
    "hydro": {},
    "initial": {
        "kind": "riemann",
        "position": 0.5,
        "left": {"density": 1.0, "pressure": 1.0},
        "right": {"density": 0.125, "pressure": 0.1},
    },
}


def tube(**changes: Any) -> dict[str, Any]:
    return {**TUBE, **changes}


def test_the_examples_are_sound() -> None:
    scenario_from(tables(), source="x")
    scenario_from(tube(), source="x")


@pytest.mark.parametrize(
    ("path", "value", "sentence"),
    [
        ("mesh.size", [1e5], "mesh.size: expected one entry for each of 2 axes, came 1"),
        ("mesh.tile", [6, 4, 1], "mesh.tile: expected one entry for each of 2 axes, came 3"),
        ("mesh.tile", [13, 4], "mesh.tile: a tile 13 zones long does not fit 12 zones along x"),
        ("mesh.tile", [11, 4], "[hydro] reads a halo of 2 zones along x, but the narrowest tile has 1"),
        ("mesh.edges", {"z": "outflow"}, "mesh.edges.z: the mesh has no axis z"),
        ("mesh.edges", {"x": ["periodic", "outflow"]}, "both edges of an axis are periodic or neither"),
        ("time_step", {"lag": 1, "cfl": 0.51}, "time_step.cfl: expected at most 0.5 with a lag of 1"),
        ("time_step", {"lag": 2, "growth": 1.6}, "time_step.growth: expected at most 1.5 with a lag of 2"),
        ("transport.lowest_photon_energy", 3000, "expected more than lowest_photon_energy = 3000"),
        ("transport.at_most", 1, "transport.at_most: expected at least 2"),
        ("transport.opacity", {"absorption": 0, "scattering": 0}, "cannot both be 0"),
        ("eos.radiation", True, "eos.radiation: expected false, came true"),
        ("species", {"network": "alpha13"}, "with [burning] the species are the network's"),
        ("initial.pressure", 1e22, "initial.pressure: expected a temperature or a pressure, came both"),
        ("initial.temperature", None, "initial.temperature: is missing; expected a temperature [K] or a"),
        ("initial.composition", {}, "initial.composition: is missing; expected mass fractions of He4, C12"),
        ("initial.composition", {"He4": 0.9}, "sum to 1, came a sum of 0.9"),
        ("initial.composition", {"He": 0.5, "C12": 0.5}, "composition.He: unknown species; did you mean He4"),
        ("initial.spots.0.composition", {"C12": 0.5}, "initial.spots.0.composition: expected mass fractions"),
        ("initial.spots.0.centre", [1.0], "spots.0.centre: expected one entry for each of 2 axes, came 1"),
        ("initial.spots.0.centre", [2e5, 1.0], "initial.spots.0.centre: expected x between 0 and 120000 cm"),
        ("initial.spots.0.centre", [-1.0, 1.0], "initial.spots.0.centre: expected x between 0 and 120000 cm"),
    ],
)  # fmt: skip
def test_a_broken_rule_makes_one_fault(path: str, value: Any, sentence: str) -> None:
    spoilt = changed(path, value)
    if path == "transport.at_most":
        spoilt["transport"]["lag"] = 1
    (fault,) = faults_of(spoilt)
    assert sentence in fault


def test_a_large_cfl_is_allowed_without_a_lag() -> None:
    scenario_from(changed("time_step", {"lag": 0, "cfl": 0.9, "growth": 5.0}), source="x")


def test_a_lag_at_the_limits_is_allowed() -> None:
    scenario_from(changed("time_step", {"lag": 1, "cfl": 0.5, "growth": 1.5}), source="x")


def test_a_run_needs_a_step() -> None:
    spoilt = tables(hydro=None, transport=None, burning=None, species={"network": "alpha13"})
    (fault,) = faults_of(spoilt)
    assert fault == "example.toml: no step takes part; add one of the tables [hydro], [transport], [burning], [timers]"


def test_without_hydrodynamics_the_step_needs_a_bound() -> None:
    (fault,) = faults_of(tables(hydro=None, time_step={}))
    assert "time_step.maximum: is missing" in fault


def test_too_many_zones() -> None:
    spoilt = tube(mesh={"zones": [10**5, 10**5], "size": [1.0, 1.0], "tile": [10**4, 10**4]})
    (fault,) = faults_of(spoilt)
    assert "mesh.zones: expected at most 1e+09 zones in all, came 1.0e+10" in fault


def test_too_many_tiles() -> None:
    spoilt = tube(mesh={"zones": [10**4, 10**4], "size": [1.0, 1.0], "tile": [2, 2]})
    (fault,) = faults_of(spoilt)
    assert "mesh.tile: expected at most 1e+06 tiles, came 2.5e+07" in fault


def test_composition_without_species() -> None:
    spoilt = tables(burning=None)
    (fault,) = faults_of(spoilt)
    assert "initial.composition: the gas has no species" in fault


@pytest.mark.parametrize(
    ("species", "sentence"),
    [
        (
            {"names": ["He4"], "mass_numbers": [4.0], "charges": []},
            "species.charges: expected one entry for each",
        ),
        (
            {"names": ["a", "a"], "mass_numbers": [4, 4], "charges": [2, 2]},
            "species.names: a is listed twice",
        ),
        ({"names": ["a"], "mass_numbers": [4], "charges": [2], "network": "alpha13"}, "one of the two"),
        ({}, "one of the two"),
    ],
)
def test_lists_of_species(species: dict[str, Any], sentence: str) -> None:
    faults = faults_of(tables(burning=None, species=species))
    assert any(sentence in fault for fault in faults)


def test_a_pressure_below_that_of_cold_electrons() -> None:
    spoilt = tables()
    spoilt["initial"]["pressure"] = 1e10  # cold electrons at 1e6 g/cm^3 press with about 3e22 erg/cm^3
    del spoilt["initial"]["temperature"]
    (fault,) = faults_of(spoilt)
    assert "initial.pressure: no temperature gives 1e+10 erg/cm^3" in fault


def test_radiation_that_nothing_transports() -> None:
    spoilt = tables(transport=None)
    spoilt["initial"]["radiation_temperature"] = 1e8
    (fault,) = faults_of(spoilt)
    assert "initial.radiation_temperature: there is no radiation without [transport]" in fault


SLAB = {"kind": "radiation_slab", "density": 1.0, "temperature": 1e6, "slab_temperature": 1e7, "ends": 0.5}


def test_a_radiation_slab_needs_transport() -> None:
    (fault,) = faults_of(tube(initial=SLAB))
    assert "initial.kind: a radiation_slab needs [transport]" in fault


def test_a_radiation_slab_lies_in_the_mesh_and_has_a_width() -> None:
    slab = {**SLAB, "begins": 3.0, "ends": 2.0}
    faults = faults_of(tube(initial=slab, transport={}))
    assert [fault.split(": ")[1] for fault in faults] == ["initial.ends", "initial.ends"]


def test_states_that_meet_outside_the_mesh() -> None:
    (fault,) = faults_of(tube(initial={**TUBE["initial"], "position": 2.0}))
    assert "initial.position: expected at most 1 cm" in fault


def test_states_that_meet_across_an_axis_that_is_not_there() -> None:
    (fault,) = faults_of(tube(initial={**TUBE["initial"], "axis": "y"}))
    assert "initial.axis: the mesh has no axis y" in fault


def test_a_blast_outside_the_mesh() -> None:
    blast = {"kind": "blast", "density": 1, "pressure": 1, "energy": 1, "radius": 0.1, "centre": [1.5]}
    (fault,) = faults_of(tube(initial=blast))
    assert "initial.centre: expected x between 0 and 1 cm, came 1.5" in fault


def test_states_on_both_sides_are_looked_at() -> None:
    initial = {
        **TUBE["initial"],
        "left": {"density": 1.0},
        "right": {"density": 1.0, "composition": {"C12": 1.0}},
    }
    faults = faults_of(tube(initial=initial))
    keys = [fault.split(": ")[1] for fault in faults]
    assert keys == ["initial.left.temperature", "initial.right.temperature", "initial.right.composition"]


def test_a_fixed_edge_needs_its_state() -> None:
    spoilt = tube(mesh={**TUBE["mesh"], "edges": {"x": ["fixed", "outflow"]}})
    (fault,) = faults_of(spoilt)
    assert "fixed.x_low: is missing; expected the state beyond this fixed edge" in fault
    scenario_from({**spoilt, "fixed": {"x_low": {"density": 1.0, "pressure": 1.0}}}, source="x")


def test_a_state_for_an_edge_that_is_not_fixed() -> None:
    (fault,) = faults_of(tube(fixed={"x_high": {"density": 1.0, "pressure": 1.0}}))
    assert 'fixed.x_high: this edge is not fixed; set mesh.edges.x to "fixed"' in fault


def test_the_state_of_a_fixed_edge_is_looked_at() -> None:
    spoilt = tube(mesh={**TUBE["mesh"], "edges": {"x": "fixed"}}, fixed={"x_low": {"density": 1.0}})
    faults = faults_of(spoilt)
    assert [fault.split(": ")[1] for fault in faults] == ["fixed.x_high", "fixed.x_low.temperature"]


def test_a_spot_that_is_no_table_keeps_the_numbers_of_the_next() -> None:
    spoilt = tables()
    good = spoilt["initial"]["spots"][0]
    spoilt["initial"]["spots"] = [3, {**good, "centre": [1.0]}]
    faults = faults_of(spoilt)
    assert [fault.split(": ")[1] for fault in faults] == ["initial.spots.0", "initial.spots.1.centre"]
