"""The Rosenbrock integrator: its coefficients, its order, its step control and what it counts."""

from __future__ import annotations

import numpy as np
import pytest

from breakstep.kernels.burning.network import Network, Reaction, Species, build_network
from breakstep.kernels.burning.rosenbrock import EMBEDDED_ORDER, GAMMA, ORDER, STAGES, A, C
from breakstep.kernels.burning.stiff import (
    DONE,
    FACTORISATIONS,
    JACOBIANS,
    NOT_FINITE,
    REJECTED,
    RIGHT_HAND_SIDES,
    SUB_STEPS,
    SUBSTEP_LIMIT,
)
from breakstep.kernels.eos import GammaLaw
from tests.kinetics import Integration, abstract_species, hires, robertson, run

# One sub-step over the whole duration: every error is below such a tolerance.
NO_CONTROL = 1e9


def classical_coefficients() -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Undo the transformation of Hairer & Wanner, section IV.7: alpha, Gamma, both rows of weights."""
    lower = np.zeros((STAGES, STAGES))
    lower[:, :-1] = C
    gammas = np.linalg.inv(np.eye(STAGES) / GAMMA - lower)
    weights = A[-1].copy()
    embedded = weights @ gammas
    weights[-1] = 1.0
    return A @ gammas, gammas, weights @ gammas, embedded


def order_residuals(weights: np.ndarray) -> dict[int, list[float]]:
    """Order conditions of Rosenbrock methods (Hairer & Wanner, table IV.7.1), left minus right side."""
    alpha, gammas, _, _ = classical_coefficients()
    g = GAMMA
    beta = alpha + gammas - g * np.eye(STAGES)
    c, b = alpha.sum(axis=1), beta.sum(axis=1)
    return {
        1: [weights.sum() - 1.0],
        2: [weights @ b - (1 / 2 - g)],
        3: [weights @ c**2 - 1 / 3, weights @ beta @ b - (1 / 6 - g + g**2)],
        4: [
            weights @ c**3 - 1 / 4,
            weights @ (c * (alpha @ b)) - (1 / 8 - g / 3),
            weights @ beta @ c**2 - (1 / 12 - g / 3),
            weights @ beta @ beta @ b - (1 / 24 - g / 2 + 3 / 2 * g**2 - g**3),
        ],
    }


def test_order_conditions_hold_for_the_solution_and_for_the_embedded_one() -> None:
    _, _, weights, embedded = classical_coefficients()
    for order, residuals in order_residuals(weights).items():
        # sixteen published digits, coefficients up to 34: a few 1e-15
        assert np.max(np.abs(residuals)) < 1e-14, order
    for order, residuals in order_residuals(embedded).items():
        if order <= EMBEDDED_ORDER:
            assert np.max(np.abs(residuals)) < 1e-14, order
        else:
            assert np.max(np.abs(residuals)) > 1e-3  # or there would be nothing to judge a sub-step by


@pytest.mark.parametrize("which", [2, 3], ids=["solution", "embedded"])
def test_both_solutions_forget_infinitely_fast_modes(which: int) -> None:
    alpha, gammas, *_ = classical_coefficients()
    weights = classical_coefficients()[which]
    # stability function at infinity: 1 - b (alpha + Gamma)^-1 1 (Hairer & Wanner, section IV.7)
    assert abs(1.0 - weights @ np.linalg.solve(alpha + gammas, np.ones(STAGES))) < 1e-12


def logistic() -> Network:
    return build_network("logistic", abstract_species("a", "b"), [Reaction(("a", "b"), ("b", "b"))])


def test_observed_order_on_a_smooth_problem() -> None:
    start, duration = 0.1, 4.0
    exact = 1.0 / (1.0 + (1.0 / start - 1.0) * np.exp(-duration))
    counts, errors = np.array([8, 16, 32, 64]), []
    for count in counts:
        abundances = np.array([1.0 - start, start])
        for _ in range(count):
            abundances = run(logistic(), abundances, duration / count, NO_CONTROL, NO_CONTROL).abundances
        errors.append(abs(abundances[1] - exact))
    observed = -np.polyfit(np.log(counts), np.log(errors), 1)[0]
    # the next term of the error still shows at 8 sub-steps
    assert observed == pytest.approx(ORDER, abs=0.25)


def test_tolerance_controls_the_error() -> None:
    reference = run(hires(), (1, 0, 0, 0, 0, 0, 0, 0.0057), 5.0, 1e-10, 1e-14).abundances
    errors = []
    for rtol in (1e-3, 1e-5, 1e-7):
        result = run(hires(), (1, 0, 0, 0, 0, 0, 0, 0.0057), 5.0, rtol, rtol * 1e-4)
        errors.append(np.max(np.abs(result.abundances / reference - 1.0)))
        assert errors[-1] < 10.0 * rtol  # sub-steps' errors add up, of which few matter
    assert errors[0] > 10.0 * errors[1] > 100.0 * errors[2]


def test_counters_tell_the_work() -> None:
    counters = run(robertson(), (1, 0, 0), 40.0, 1e-4, 1e-8).counters
    tried = counters[SUB_STEPS] + counters[REJECTED]
    assert counters[REJECTED] > 0
    assert counters[FACTORISATIONS] == tried
    assert counters[JACOBIANS] == counters[SUB_STEPS]  # one at each state, kept after a rejection
    assert counters[RIGHT_HAND_SIDES] == counters[JACOBIANS] + (STAGES - 1) * tried


def test_sub_step_limit_is_an_outcome_not_an_answer() -> None:
    result = run(robertson(), (1, 0, 0), 40.0, 1e-4, 1e-8, max_substeps=7)
    assert result.outcome == SUBSTEP_LIMIT
    assert result.counters[SUB_STEPS] + result.counters[REJECTED] == 7
    assert np.all(np.isfinite(result.state))


def cooling(heat: float) -> Integration:
    """Decay of `a` at a constant rate, taking ``heat`` MeV a nucleus from the gas."""
    species = [Species("a", 4, 2, heat), Species("b", 4, 2, 0.0)]
    network = build_network("cooling", species, [Reaction(("a",), ("b",), 1.0)])
    return run(network, (0.25, 0.0), 1.0, 1e-4, 1e-10, eos=GammaLaw(5 / 3).vector, max_substeps=2000)


def test_proposal_without_a_number_is_rejected() -> None:
    # the gas holds 3/2 k T a nucleon, 0.52 MeV a nucleus, and 63 % decay: 0.5 MeV each can be paid, 2 MeV
    # would take the temperature below zero, where rates are not numbers
    assert cooling(0.5).outcome == DONE
    broke = cooling(2.0)
    assert broke.outcome != DONE
    assert broke.counters[REJECTED] > 0
    assert np.all(np.isfinite(broke.state))
    assert broke.state[-1] > 0.0


def test_rate_that_overflows_is_reported() -> None:
    reaction = Reaction(("a", "a"), ("b",), 1e200, sets=((700.0, 0, 0, 0, 0, 0, 0),))
    network = build_network("overflow", abstract_species("a", "b"), [reaction])
    result = run(network, (1.0, 0.0), 1.0, 1e-4, 1e-10)
    assert result.outcome == NOT_FINITE
    assert result.abundances.tolist() == [1.0, 0.0]


def test_result_does_not_depend_on_what_the_scratch_was_used_for() -> None:
    first = run(robertson(), (1, 0, 0), 40.0, 1e-6, 1e-10)
    again = run(robertson(), (1, 0, 0), 40.0, 1e-6, 1e-10)
    np.testing.assert_array_equal(first.state, again.state)
