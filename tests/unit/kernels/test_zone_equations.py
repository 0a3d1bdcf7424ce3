"""One zone's equations: the Jacobian against differences, temperature against the equation of state."""

from __future__ import annotations

import numpy as np
import pytest

from breakstep.kernels.burning.network import load_network
from breakstep.kernels.burning.scipy_form import ZoneProblem
from breakstep.kernels.eos import GammaLaw, Stellar
from tests.kinetics import run, specific_energy

EQUATIONS = {
    "gamma_law": GammaLaw(5.0 / 3.0, 1.3).vector,
    "stellar": Stellar().vector,
    "stellar, no radiation": Stellar(radiation=False).vector,
}
equations_of_state = pytest.mark.parametrize("eos", EQUATIONS.values(), ids=EQUATIONS.keys())


def problem(eos: np.ndarray, self_heating: bool = True) -> ZoneProblem:
    network = load_network("alpha13")
    fractions = np.random.default_rng(3).dirichlet(np.ones(13))
    return ZoneProblem(network, eos, 1e7, 4e9, fractions, 1.0, self_heating)


def differences(zone: ZoneProblem, state: np.ndarray) -> np.ndarray:
    """Jacobian by central differences, extrapolated once (Richardson): error of fourth order in the step."""
    columns = []
    for j in range(state.size):
        slopes = []
        for part in (1e-3, 5e-4):
            step = np.zeros(state.size)
            step[j] = part * state[j]
            change = zone.change(0.0, state + step) - zone.change(0.0, state - step)
            slopes.append(change / (2.0 * step[j]))
        columns.append((4.0 * slopes[1] - slopes[0]) / 3.0)
    return np.array(columns).T


@pytest.mark.parametrize("self_heating", [True, False])
@equations_of_state
def test_jacobian_is_the_derivative(eos: np.ndarray, self_heating: bool) -> None:
    zone = problem(eos, self_heating)
    state = zone.start
    exact, approximate = zone.jacobian(0.0, state), differences(zone, state)
    if not self_heating:  # the temperature does not change: neither its row nor its column is used
        assert not exact[-1].any()
        exact, approximate, state = exact[:-1, :-1], approximate[:-1, :-1], state[:-1]
    # each row in units of its largest effect of a relative change of an unknown
    scale = np.abs(exact * state).max(axis=1, keepdims=True)
    # rates go as T**30 and steeper: (30 * 5e-4)**4 / 30 is 2e-9 of truncation, and that is what is measured
    assert np.max(np.abs(exact - approximate) * state / scale) < 1e-8


@equations_of_state
def test_energy_is_linear_in_the_number_of_nuclei(eos: np.ndarray) -> None:
    # the difference quotient for the energy of one more nucleus takes this for granted
    network = load_network("alpha13")
    energies = []
    for parts in ((1.0, 0.0), (0.5, 0.5), (0.0, 1.0)):
        molar = np.zeros(13)
        molar[0], molar[-1] = parts[0] / 4.0, parts[1] / 56.0  # the same charge a gram
        energies.append(specific_energy(network, eos, 1e7, np.append(molar, 3e9)))
    assert energies[1] == pytest.approx(0.5 * (energies[0] + energies[2]), rel=1e-14)


@equations_of_state
def test_temperature_stays_that_of_the_energy_set_free(eos: np.ndarray) -> None:
    network = load_network("alpha13")
    molar = np.zeros(13)
    molar[0] = 0.25  # pure helium: the number of nuclei falls
    start = np.append(molar, 1.5e9)
    end = run(network, molar, 1e-2, 1e-7, 1e-13, temperature=1.5e9, density=1e6, eos=eos).state
    released = float((end[:-1] - molar) @ network.arrays.binding)
    gained = specific_energy(network, eos, 1e6, end) - specific_energy(network, eos, 1e6, start)
    assert end[:-1].sum() < 0.9 * molar.sum()
    # a tenth of a sub-step's tolerance; measured 1e-13 to 6e-11
    assert gained == pytest.approx(released, rel=1e-8)
