"""Networks as data: reading, checking, layout."""

from __future__ import annotations

import json
import pickle
from importlib import resources
from pathlib import Path

import numpy as np
import pytest

from breakstep.errors import DeclarationError
from breakstep.kernels.burning.network import (
    Network,
    Reaction,
    Species,
    build_network,
    load_network,
    read_network,
)
from breakstep.kernels.burning.network_layout import MEV
from breakstep.kernels.constants import N_A
from tests.kinetics import abstract_species, robertson


@pytest.fixture(scope="module")
def alpha() -> Network:
    return load_network("alpha13")


@pytest.fixture
def alpha_file() -> dict:
    return json.loads(resources.files("breakstep.kernels.burning").joinpath("alpha13.json").read_text("utf-8"))


def mixture(network: Network, seed: int) -> np.ndarray:
    fractions = np.random.default_rng(seed).dirichlet(np.ones(len(network.names)))
    return fractions / network.mass_numbers


def test_alpha_chain_is_helium_to_nickel(alpha: Network) -> None:
    assert alpha.names[:3] == ("He4", "C12", "O16")
    assert alpha.names[-1] == "Ni56"
    assert len(alpha.reactions) == 30
    np.testing.assert_array_equal(alpha.mass_numbers, 2.0 * alpha.charges)


def test_every_reaction_names_its_source(alpha: Network) -> None:
    assert all(reaction.source for reaction in alpha.reactions)


def test_published_q_values_agree_with_the_binding_energies(alpha: Network) -> None:
    binding = dict(zip(alpha.names, alpha.binding_energies, strict=True))
    for reaction in alpha.reactions:
        released = sum(number * binding[name] for name, number in reaction.net_change().items())
        # REACLIB's own column rests on older masses; it differs from AME2020 by up to 0.005 MeV
        assert released == pytest.approx(reaction.q_value, abs=0.005), str(reaction)


def test_rates_of_change_conserve_mass_number(alpha: Network) -> None:
    change = alpha.ydot(1e7, 4e9, mixture(alpha, 1))
    terms = alpha.mass_numbers * change
    # fluxes enter with whole-number coefficients, so only the additions round
    assert abs(terms.sum()) <= 1e-14 * np.abs(terms).sum()


def test_energy_rate_is_the_binding_energy_released(alpha: Network) -> None:
    molar = mixture(alpha, 2)
    released = N_A * MEV * (alpha.ydot(1e7, 4e9, molar) @ alpha.binding_energies)
    # binding energies are some fifty times the Q values that are left of them: 1e-16 becomes 1e-14
    assert alpha.energy_rate(1e7, 4e9, molar) == pytest.approx(released, rel=1e-12)


def test_flux_follows_the_power_of_density() -> None:
    reactions = [Reaction(("a", "a", "a"), ("b",), 2.0, 2), Reaction(("b",), ("c",), 3.0)]
    network = build_network("abc", abstract_species("a", "b", "c"), reactions)
    made = network.ydot(5.0, 1e9, np.array([2.0, 7.0, 0.0]))
    triple, decay = 2.0 * 5.0**2 * 2.0**3, 3.0 * 7.0
    np.testing.assert_allclose(made, [-3.0 * triple, triple - decay, decay], rtol=1e-15)


def test_source_without_reactants_is_constant() -> None:
    network = build_network("source", abstract_species("a"), [Reaction((), ("a",), 0.25)])
    assert network.ydot(1.0, 1e9, np.array([9.0])).tolist() == [0.25]


def test_all_faults_are_reported_together() -> None:
    species = [Species("He4", 4, 2), Species("C12", 12, 6), Species("C12", 0, 6)]
    reactions = [
        Reaction(("He4",), ("C12",)),
        Reaction(("He4",), ("Fe52",)),
        Reaction(("He4",) * 4, ("He4",) * 4),
        Reaction(("He4",), ("He4",), sets=((1.0, 2.0),)),
        Reaction(("He4",), ("He4",), density_exponent=-1),
    ]
    with pytest.raises(DeclarationError) as caught:
        build_network("faulty", species, reactions, conserving=True)
    faults = caught.value.details["faults"]
    for part in (
        "twice",
        "positive",
        "balance",
        "unknown species Fe52",
        "more than 3",
        "7 coeff",
        "negative",
    ):
        assert sum(part in fault for fault in faults) == 1, part
    assert all(fault in str(caught.value) for fault in faults)


def test_unknown_network_names_the_known_ones() -> None:
    with pytest.raises(DeclarationError, match="alpha13"):
        load_network("alpha14")


def test_network_is_read_from_a_file_of_the_same_layout(tmp_path: Path, alpha: Network, alpha_file: dict) -> None:
    path = tmp_path / "chain.json"
    path.write_text(json.dumps(alpha_file))
    network = read_network(path)
    assert network.name == "chain"
    np.testing.assert_array_equal(network.rates(3e9), alpha.rates(3e9))


@pytest.mark.parametrize("text", ["not json", "[]", '{"species": [{"name": "He4"}], "reactions": []}'])
def test_malformed_file_is_refused(tmp_path: Path, text: str) -> None:
    path = tmp_path / "broken.json"
    path.write_text(text)
    with pytest.raises(DeclarationError, match="broken"):
        read_network(path)


def test_file_that_loses_charge_is_refused(tmp_path: Path, alpha_file: dict) -> None:
    alpha_file["species"][1]["charge"] = 5
    path = tmp_path / "lossy.json"
    path.write_text(json.dumps(alpha_file))
    with pytest.raises(DeclarationError, match="does not balance"):
        read_network(path)


def test_pickled_network_is_the_same_and_read_only(alpha: Network) -> None:
    copy = pickle.loads(pickle.dumps(alpha))
    np.testing.assert_array_equal(copy.rates(2e9), alpha.rates(2e9))
    for network in (alpha, copy):
        with pytest.raises(ValueError, match="read-only"):
            network.arrays.binding[0] = 1.0


def test_positions_cover_all_that_a_reaction_couples() -> None:
    network = robertson()
    coupled = network.positions[:3, :3] >= 0
    # y3 is made by y2 only; everything else of the three equations appears
    assert coupled[0].all()
    assert coupled[1].all()
    assert coupled[2, 1]
