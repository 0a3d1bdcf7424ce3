"""A user's own step that checks the time step it is given against a limit of its own."""

from __future__ import annotations

import math
import pickle
from collections.abc import Mapping
from dataclasses import replace

import numpy as np
import pytest

from breakstep.engine.program import Program
from breakstep.engine.run import RunOptions
from breakstep.engine.serial import SerialDispatch
from breakstep.errors import CourantError, DeclarationError
from breakstep.steps.splitting import lie
from breakstep.steps.step import Array, Call, Read, Step
from tests.toys import Toy, dt_reduction


def conduct(arrays: Mapping[str, Array], call: Call) -> dict[str, Array]:
    """Invented: is stable up to 0.05 s over the largest u."""
    worst = int(np.abs(arrays["u"]).argmax())
    zone = int(np.unravel_index(worst, arrays["u"].shape[1:])[0]) + call.origin[0]
    call.require_time_step(0.05 / float(np.abs(arrays["u"]).max()), f"conduction in zone {zone}")
    return {"u": arrays["u"] * (1.0 if call.cycle != 2 else 40.0)}


def called(dt: float, fraction: float = 1.0) -> Call:
    """A call with a time step."""
    values = {"dt": np.array([dt, 0.0])}
    return Call("conduct", 4, 2, 3, (6, 0, 0), (3, 1, 1), (1.0, 1.0, 1.0), (True, False, False), values, fraction)


@pytest.mark.parametrize("limit", [0.1, 0.2, math.inf])
def test_a_time_step_within_the_limit_passes(limit: float) -> None:
    called(0.1).require_time_step(limit)


@pytest.mark.parametrize("limit", [math.nextafter(0.1, 0.0), 0.0, -1.0, math.nan])
def test_a_time_step_above_the_limit_is_an_error_that_says_all(limit: float) -> None:
    with pytest.raises(CourantError) as caught:
        called(0.1).require_time_step(limit, "conduction in zone 7")
    error = pickle.loads(pickle.dumps(caught.value))
    facts = {key: error.details[key] for key in ("step", "tile", "cycle", "iteration", "dt")}
    assert facts == {"step": "conduct", "tile": 3, "cycle": 4, "iteration": 2, "dt": 0.1}
    assert error.details["limit"] == limit or math.isnan(limit)
    assert str(error).startswith("step conduct, tile 3, cycle 4, iteration 2: the time step 0.1 s is more than the ")
    assert "allows (conduction in zone 7); lower the CFL factor, the growth of the time step or the lag of dt" in str(
        error
    )


def test_a_time_step_must_be_declared() -> None:
    with pytest.raises(DeclarationError, match=r"^step conduct, tile 3, cycle 4.*uses=\(\"dt\",\)"):
        replace(called(0.1), values={}).dt  # noqa: B018


def test_half_a_step_counts_as_half() -> None:
    called(0.1, fraction=0.5).require_time_step(0.05)


@pytest.mark.parametrize(("lag", "cycle"), [(0, 3), (1, 3)])
def test_a_run_stops_at_the_step_that_the_state_outgrew(lag: int, cycle: int) -> None:
    """In cycle 2 the state grows fortyfold: the next cycle's dt is too large for it whenever it was measured."""
    step = Step("conduct", conduct, (Read("u"),), ("u",), uses=("dt",))
    splitting = lie([step], [replace(dt_reduction(), lag=lag)])
    problem = replace(Toy((12,), cycles=6).problem(), splitting=splitting)
    failure = SerialDispatch().run(Program(problem, (3,)), RunOptions()).failure
    assert isinstance(failure, CourantError)
    assert failure.details["cycle"] == cycle
    assert failure.details["dt"] > failure.details["limit"]
    assert "conduction in zone " in str(failure)
