"""From tables to a problem: fields, steps and their order, edges, units."""

from __future__ import annotations

from typing import Any

import pytest

from breakstep.kernels.transport.opacity import PhotonGroups
from breakstep.mesh.mesh import Edge
from breakstep.scenario.build import KELVIN_PER_KEV, build_transport
from breakstep.scenario.load import scenario_from
from breakstep.steps.problem import Problem
from breakstep.steps.splitting import Repeat
from breakstep.steps.step import Step
from tests.unit.scenario.example import tables


def problem(*overrides: str, **changes: Any) -> Problem:
    return scenario_from(tables(**changes), source="x", overrides=overrides).problem()


def orders(made: Problem) -> list[list[tuple[str, float]]]:
    """Names and fractions of the steps, order by order; a repeat counts as a whole step."""
    return [
        [(item.name, item.fraction if isinstance(item, Step) else 1.0) for item in order]
        for order in made.splitting.orders
    ]


LOCAL = ["sweep_x", "sweep_y", "burn"]
RADIATION = ["assemble", "solve", "exchange"]


def test_lie() -> None:
    (order,) = orders(problem("run.splitting=lie"))
    assert order == [(name, 1.0) for name in LOCAL + RADIATION]


def test_alternating_keeps_the_order_of_the_radiation_steps() -> None:
    forward, backward = orders(problem("run.splitting=alternating"))
    assert [name for name, _ in forward] == LOCAL + RADIATION
    assert [name for name, _ in backward] == RADIATION + LOCAL[::-1]


def test_strang_halves_everything_but_the_radiation() -> None:
    (order,) = orders(problem("run.splitting=strang"))
    halves = [(name, 0.5) for name in LOCAL]
    assert order == [*halves, *((name, 1.0) for name in RADIATION), *halves[::-1]]


def test_strang_without_radiation_does_the_last_step_whole() -> None:
    (order,) = orders(problem("run.splitting=strang", "transport=false"))
    assert [name for name, _ in order] == ["sweep_x", "sweep_y", "burn", "sweep_y", "sweep_x"]
    assert [share for _, share in order] == [0.5, 0.5, 1.0, 0.5, 0.5]


@pytest.mark.parametrize("splitting", ["lie", "strang", "alternating"])
def test_every_order_advances_each_step_by_one_time_step(splitting: str) -> None:
    for order in orders(problem(f"run.splitting={splitting}")):
        shares: dict[str, float] = {}
        for name, share in order:
            shares[name] = shares.get(name, 0.0) + share
        assert set(shares.values()) == {1.0}


def test_one_sweep_an_axis() -> None:
    mesh = {"zones": [6, 6, 6], "size": [1e5] * 3, "tile": [3, 3, 3]}
    made = problem("transport=false", "initial.spots.0.centre=[1.0, 1.0, 1.0]", mesh=mesh)
    assert [name for name, _ in orders(made)[0]] == ["sweep_x", "sweep_y", "sweep_z", "burn"]


def test_fields_are_those_of_the_steps() -> None:
    made = problem()
    gas = made.by_name()["gas"]
    assert gas.components[5:8] == ("rho_He4", "rho_C12", "rho_O16")
    assert made.by_name()["radiation"].size == 4
    assert "radiation" not in problem("transport=false").by_name()


def test_species_without_burning() -> None:
    species = {"names": ["He4", "C12"], "mass_numbers": [4, 12], "charges": [2, 6]}
    gas = problem("burning=false", species=species).by_name()["gas"]
    assert gas.components[5:] == ("rho_He4", "rho_C12")


def test_species_of_a_network_without_burning() -> None:
    burning = problem().by_name()["gas"].components
    assert problem("burning=false", "species.network=alpha13").by_name()["gas"].components == burning


def test_the_mesh_is_cut_by_its_size() -> None:
    mesh = problem("mesh.edges.x=outflow").mesh
    assert mesh.widths == (1e4, 1e4, 1.0)
    assert mesh.edges == ((Edge.OUTFLOW, Edge.OUTFLOW), (Edge.PERIODIC, Edge.PERIODIC))


def test_a_fixed_edge_holds_the_state_in_all_fields() -> None:
    state = {
        "density": 2e6,
        "temperature": 4e8,
        "velocity": [1e7],
        "composition": {"C12": 1.0},
        "radiation_temperature": 5e8,
    }
    made = problem('mesh.edges.x=["fixed", "outflow"]', fixed={"x_low": state})
    gas = made.by_name()["gas"].fixed[(0, 0)]
    assert gas[:4] == (2e6, 2e13, 0.0, 0.0)
    assert gas[5:7] == (0.0, 2e6)
    # a T^4 with a = 4 sigma / c and sigma = 5.670374419e-5 erg/(cm^2 s K^4) (CODATA 2022)
    total = sum(made.by_name()["radiation"].fixed[(0, 0)])
    assert total == pytest.approx(4.0 * 5.670374419e-5 / 2.99792458e10 * 5e8**4, rel=1e-9)


def test_photon_energies_are_in_kilo_electronvolts() -> None:
    # 1 eV corresponds to 11604.518 K (CODATA 2022, Boltzmann constant in eV/K inverted)
    assert pytest.approx(1.1604518e7, rel=1e-7) == KELVIN_PER_KEV
    table = scenario_from(tables(), source="x").file.transport
    assert build_transport(table).groups == PhotonGroups(4, KELVIN_PER_KEV, 3000.0 * KELVIN_PER_KEV)


def test_an_end_time_ends_the_run() -> None:
    assert problem().ended is None
    assert problem("run.end_time=1e-3").ended is not None


def test_lags_and_limits_arrive() -> None:
    made = problem("time_step.lag=1", "transport.lag=2", "transport.at_most=77")
    (dt,) = made.splitting.reductions
    repeat = next(item for item in made.splitting.items() if isinstance(item, Repeat))
    assert (dt.lag, repeat.until.lag, repeat.at_most) == (1, 2, 77)


def test_fractions_are_scaled_to_sum_to_one() -> None:
    made = problem("initial.composition={He4 = 0.3333333, C12 = 0.6666666}")
    tile = made.cut((6, 4)).tiles[0]
    gas = made.initial(tile, made.mesh)["gas"]
    # 13 fractions of round-off 1.1e-16 each
    assert gas[5:].sum(axis=0) == pytest.approx(gas[0], rel=2e-15)
