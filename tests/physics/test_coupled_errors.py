"""What goes wrong in a coupled run ends it with a sentence that says where, never with a wrong answer."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
import pytest

from breakstep.errors import BreakstepError, ConvergenceError, CourantError, KernelError
from breakstep.mesh.mesh import Triple
from breakstep.steps.burning import Burning, burn
from breakstep.steps.problem import Problem
from breakstep.steps.splitting import lie
from breakstep.steps.step import Call, Read, Step
from breakstep.steps.timestep import time_step
from tests.physics.problems import Array, Embers, attempt, run, transport

TILE = (12, 10)  # two tiles along each axis: tile 1 holds zones 0 to 11 along x and 10 to 19 along y
ZONE = (5, 17, 0)  # in tile 1


@dataclass(frozen=True)
class Jolt:
    """In one cycle, multiplies the total energy: everywhere, or in one zone."""

    cycle: int
    factor: float
    zone: Triple | None = None

    def __call__(self, arrays: Mapping[str, Array], call: Call) -> dict[str, Array]:
        new = arrays["gas"].copy()
        if call.cycle == self.cycle:
            new[4][self._where(call)] *= self.factor
        return {"gas": new}

    def _where(self, call: Call) -> tuple[slice, ...]:
        if self.zone is None:
            return (slice(None),) * 3
        local = [z - o for z, o in zip(self.zone, call.origin, strict=True)]
        inside = all(0 <= z < n for z, n in zip(local, call.shape, strict=True))
        return tuple(slice(z, z + 1) if inside else slice(0) for z in local)


def jolt(cycle: int, factor: float, zone: Triple | None = None) -> tuple[Step, ...]:
    return (Step("jolt", Jolt(cycle, factor, zone), (Read("gas"),), ("gas",)),)


def failure(problem: Problem) -> BreakstepError:
    """The error that ends a run in four tiles, which leaves no fields that could be taken for an answer."""
    result = attempt(problem, TILE)
    assert isinstance(result.failure, BreakstepError)
    assert result.fields == {}
    return result.failure


@pytest.mark.parametrize("factor", [100.0, 1e6])
def test_a_lagged_time_step_that_has_become_too_large_is_refused(factor: float) -> None:
    """Heated a hundredfold, the gas is some tenfold too fast for the dt that was measured a cycle before.

    Heated a millionfold, the step would spoil zones as well; the time step is named all the same.
    """
    heated = Embers(how=None, lag=1, last=jolt(2, factor))
    error = failure(heated.problem())
    assert isinstance(error, CourantError)
    assert error.details["courant"] > 1.0
    assert (error.details["tile"], error.details["cycle"]) == (0, 3)
    assert error.message.startswith("step sweep_x, tile 0, cycle 3: the time step ")
    assert "above the limit of 1; lower the CFL factor" in error.message


def test_the_same_heating_is_no_trouble_without_a_lag() -> None:
    heated = Embers(how=None, lag=0, last=jolt(2, 100.0), burning=Burning(cutoff_temperature=1e15))
    assert attempt(heated.problem(), TILE).failure is None


def test_gas_without_pressure_is_found_by_the_sweep_that_meets_it() -> None:
    error = failure(Embers(first=jolt(2, -1.0, ZONE)).problem())
    assert type(error) is KernelError
    assert (error.details["zone"], error.details["tile"], error.details["cycle"]) == (ZONE, 1, 2)
    assert error.message.startswith(f"step sweep_x, tile 1, cycle 2: zone {ZONE} has or gets a density")
    assert "total_energy -" in error.message  # the state itself


def test_gas_without_pressure_is_found_by_the_time_step() -> None:
    error = failure(Embers(last=jolt(2, -1.0, ZONE)).problem())
    assert type(error) is KernelError
    assert (error.details["zone"], error.details["tile"], error.details["cycle"]) == (ZONE, 1, 2)
    assert error.message.startswith(f"step dt, tile 1, cycle 2: zone {ZONE} has no sound speed")


def test_gas_without_pressure_is_found_by_the_burning() -> None:
    """Where no sweep comes before it."""
    embers = Embers()
    clock = time_step(None, cfl=1.0, maximum=1e-9)
    alone = lie([*jolt(1, -1.0, ZONE), burn(embers.gas, embers.burning)], [clock])
    error = failure(replace(embers.problem(), splitting=alone))
    assert type(error) is KernelError
    assert (error.details["zone"], error.details["tile"], error.details["cycle"]) == (ZONE, 1, 1)
    assert "its internal energy is not positive" in error.message


def test_the_sub_step_limit_ends_the_run_at_the_zone_that_reached_it() -> None:
    spot = ((5.5 / 24, 17.5 / 20, 0.02, 3e9),)  # hot at the centre of one zone, and cold a zone away
    embers = Embers(spots=spot, burning=Burning(sub_step_limit=3))
    clock = time_step(None, cfl=1.0, maximum=1e-6)
    alone = lie([burn(embers.gas, embers.burning)], [clock])
    error = failure(replace(embers.problem(), splitting=alone))
    assert type(error) is KernelError
    assert (error.details["zone"], error.details["tile"], error.details["cycle"]) == (ZONE, 1, 0)
    assert error.message.startswith(
        f"step burn, tile 1, cycle 0: burning stopped at zone {ZONE}: the sub-step limit was reached;"
    )
    assert error.message.count("zone (") == 1  # once, and as the mesh counts


def test_a_solve_that_does_not_converge_ends_the_run() -> None:
    error = failure(Embers(how=transport(at_most=5)).problem())
    assert isinstance(error, ConvergenceError)
    assert (error.details["repeat"], error.details["cycle"]) == ("solve", 0)
    assert error.details["value"][0] > 1e-8
    assert "solve did not converge in cycle 0: after 5 iterations its residual is" in error.message


def test_none_of_this_happens_without_a_cause() -> None:
    assert np.isfinite(run(Embers(cycles=4, lag=1).problem(), TILE)["gas"]).all()
