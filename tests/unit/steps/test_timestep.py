"""The time step: bounds, growth, the end of the run, and what is refused."""

from __future__ import annotations

import itertools
import pickle
from collections.abc import Callable, Iterable

import numpy as np
import numpy.typing as npt
import pytest

from breakstep.errors import DeclarationError, KernelError
from breakstep.kernels.eos import GammaLaw
from breakstep.steps.hydro import Gas
from breakstep.steps.reduction import Combine, Finish, Reduction, combine, finish_rows
from breakstep.steps.step import Call
from breakstep.steps.timestep import time_is_up, time_step

Array = npt.NDArray[np.float64]
GAS = Gas(GammaLaw(1.4))


def finish(**bounds: float) -> Finish:
    """The rule that turns rates into time steps, with a CFL factor of 1/2."""
    return time_step(GAS, cfl=0.5, **bounds).finish  # type: ignore[arg-type]


def march(rule: Finish, rates: Iterable[float], at_most: int = 10_000) -> list[Array]:
    """Results (dt, t) cycle by cycle, the last one the first that says the time is up."""
    results: list[Array] = []
    for rate in itertools.islice(rates, at_most):
        results.append(rule(np.array([rate]), results[-1] if results else None))
        if time_is_up(results[-1]):
            break
    return results


def steps(results: list[Array]) -> list[float]:
    return [float(dt) for dt, _ in results]


def times(results: list[Array]) -> list[float]:
    return [float(time) for _, time in results]


def test_the_first_step_is_the_cfl_factor_over_the_rate() -> None:
    (first,) = march(finish(), [4.0])
    assert first.tolist() == [0.125, 0.0]


def test_time_is_the_sum_of_the_steps_before() -> None:
    results = march(finish(), [4.0, 8.0, 16.0])
    assert steps(results) == [0.125, 0.0625, 0.03125]
    assert times(results) == [0.0, 0.125, 0.1875]


def test_a_step_grows_by_the_growth_at_most_and_falls_at_once() -> None:
    assert steps(march(finish(growth=1.5), [1.0, 0.1, 0.1, 10.0])) == [0.5, 0.75, 1.125, 0.05]


@pytest.mark.parametrize(("first", "expected"), [(0.01, 0.01), (1.0, 0.5)])
def test_the_first_step_has_a_bound_of_its_own(first: float, expected: float) -> None:
    results = march(finish(first=first, growth=2.0), [1.0, 1.0])
    assert steps(results) == [expected, min(2.0 * expected, 0.5)]


def test_every_step_is_bounded_by_the_maximum() -> None:
    assert steps(march(finish(maximum=0.2, growth=2.0), [10.0, 1.0, 0.1, 0.0])) == [0.05, 0.1, 0.2, 0.2]


def test_the_end_time_is_hit_exactly_and_reported_once_the_step_is_zero() -> None:
    results = march(finish(end_time=1.3), itertools.repeat(0.7))
    assert times(results)[-1] == 1.3
    assert steps(results)[-1] == 0.0
    assert min(steps(results)[:-1]) > 0.0


def test_after_the_end_nothing_moves() -> None:
    rule = finish(end_time=1.0)
    last = march(rule, itertools.repeat(3.0))[-1]
    assert rule(np.array([3.0]), last).tolist() == [0.0, 1.0]


@pytest.mark.parametrize("cycles", [1, 3, 7, 10, 100, 3000])
def test_equal_steps_come_out_in_their_number(cycles: int) -> None:
    """A sum of rounded steps misses the end time by a rounding error; no cycle is made of it."""
    results = march(finish(maximum=1.0 / cycles, end_time=1.0), itertools.repeat(0.0))
    assert len(results) == cycles + 1
    assert times(results)[-1] == 1.0
    # n^2 1.1e-16 of a step is lost in the sum at worst, and made up for by the last ones: 1e-9 for 3000.
    assert steps(results)[:-1] == pytest.approx([1.0 / cycles] * cycles, rel=1e-9)


@pytest.mark.parametrize("remainder", [1e-6, 1e-3, 0.3, 0.999])
def test_what_remains_is_shared_rather_than_left_as_a_sliver(remainder: float) -> None:
    results = march(finish(maximum=0.1, end_time=0.4 + 0.1 * remainder), itertools.repeat(0.0))
    *full, before_last, last = steps(results)[:-1]
    assert full == [0.1] * 3
    # The sum of three steps is rounded to 5e-17, of half a step 1e-15.
    assert before_last == pytest.approx(last, rel=1e-14)


def test_whatever_the_rates_the_end_is_exact_and_no_step_is_a_sliver() -> None:
    """Ten thousand runs of invented rates; a sum off by one unit in its last place must not become a step."""
    numbers = np.random.default_rng(20)
    for _ in range(10_000):
        end = float(10.0 ** numbers.uniform(-8.0, 3.0))
        growth = float(numbers.choice([1.0, 1.25, 2.0, np.inf]))
        rule = finish(end_time=end, growth=growth, first=end * float(numbers.uniform(0.05, 1.5)))
        results = march(rule, (float(rate) for rate in numbers.uniform(0.25, 4.0, size=100) / end))
        assert results[-1].tolist() == [0.0, end]
        taken = steps(results)[:-1]
        # The CFL factor over the rate is an eighth of the end time at least; a remainder below two steps is halved.
        assert min(taken) >= 0.5 * min(0.125 * end, taken[0])


def test_a_lagged_result_serves_the_first_cycles_with_time_running_on() -> None:
    reduction = time_step(GAS, cfl=0.5, lag=2, growth=2.0, first=0.1)
    rows = finish_rows(reduction, np.array([1.0]), None, 3)
    assert rows.tolist() == [[0.1, 0.0], [0.2, 0.1], [0.4, pytest.approx(0.3)]]


@pytest.mark.parametrize("rate", [np.nan, np.inf, -1.0])
def test_a_rate_that_is_none_stops_the_run(rate: float) -> None:
    with pytest.raises(KernelError, match="largest signal rate is"):
        finish(maximum=1.0)(np.array([rate]), None)


def test_a_rate_that_is_none_in_one_tile_is_not_outvoted() -> None:
    combined = combine(Combine.MAX, [np.array([1.0]), np.array([np.nan]), np.array([2.0])])
    assert combined is not None
    with pytest.raises(KernelError, match="largest signal rate is nan"):
        finish(maximum=1.0)(combined, None)


def test_a_step_that_nothing_bounds_stops_the_run() -> None:
    with pytest.raises(KernelError, match="nothing bounds the time step"):
        finish()(np.array([0.0]), None)


@pytest.mark.parametrize(
    ("declare", "fault"),
    [
        (lambda: time_step(GAS, cfl=0.0), "CFL factor must lie in"),
        (lambda: time_step(GAS, cfl=1.01), "CFL factor must lie in"),
        (lambda: time_step(GAS, cfl=0.6, lag=1), r"must lie in \(0, 0.5\] with a dt lag of 1, not 0.6"),
        (lambda: time_step(GAS, cfl=0.5, lag=-1), "lag must be a whole number"),
        (lambda: time_step(None, cfl=0.5), "give a maximum"),
        (lambda: time_step(GAS, cfl=0.5, first=0.0), "'first' must be positive, not 0.0"),
        (lambda: time_step(GAS, cfl=0.5, maximum=-1.0), "'maximum' must be positive"),
        (lambda: time_step(GAS, cfl=0.5, end_time=np.nan), "'end_time' must be positive"),
        (lambda: time_step(GAS, cfl=0.5, growth=0.9), "growth of the time step must be at least 1"),
    ],
)
def test_declarations_that_cannot_work_are_refused(declare: Callable[[], Reduction], fault: str) -> None:
    with pytest.raises(DeclarationError, match=fault):
        declare()


def call(widths: tuple[float, float, float], active: tuple[bool, bool, bool], shape: tuple[int, int, int]) -> Call:
    return Call("dt", 4, -1, 7, (10, 0, 0), shape, widths, active, {})


def gas(velocity: tuple[float, float, float], pressure: float) -> Array:
    """Two zones along x: one at rest, one that moves; density 1."""
    zones = np.zeros((5, 2, 1, 1))
    zones[0] = 1.0
    zones[1:4, 1, 0, 0] = velocity
    zones[4] = pressure / 0.4
    zones[4, 1] += 0.5 * sum(u * u for u in velocity)
    return zones


@pytest.mark.parametrize(
    ("active", "expected"),
    [((True, False, False), 3.0 / 0.1), ((True, True, False), 5.0 / 0.1), ((True, True, True), 13.0 / 0.2)],
)
def test_the_rate_is_that_of_the_fastest_axis_that_exists(active: tuple[bool, bool, bool], expected: float) -> None:
    """(|u| + c) / width with c = 1: the sweeps are one-dimensional, so the axes do not add up."""
    zones = gas((2.0, -4.0, 12.0), pressure=1.0 / 1.4)
    rate = time_step(GAS, cfl=0.5).kernel({"gas": zones}, call((0.1, 0.1, 0.2), active, (2, 1, 1)))
    assert rate == pytest.approx([expected], rel=1e-14)  # a dozen operations, rounded


def test_a_zone_without_a_sound_speed_is_named() -> None:
    zones = gas((0.0, 0.0, 0.0), pressure=1.0)
    zones[4, 1] = -1.0
    with pytest.raises(KernelError, match=r"step dt, tile 7, cycle 4: zone \(11, 0, 0\) has no sound") as caught:
        time_step(GAS, cfl=0.5).kernel({"gas": zones}, call((1.0, 1.0, 1.0), (True, False, False), (2, 1, 1)))
    assert caught.value.details["zone"] == (11, 0, 0)


def test_without_hydrodynamics_the_maximum_is_the_step() -> None:
    reduction = time_step(None, cfl=1.0, maximum=0.3, end_time=0.6)
    assert reduction.reads == ()
    rate = float(reduction.kernel({}, call((1.0, 1.0, 1.0), (True, False, False), (2, 1, 1)))[0])
    assert steps(march(reduction.finish, itertools.repeat(rate))) == [0.3, 0.3, 0.0]


def test_the_reduction_travels_between_processes() -> None:
    reduction = time_step(GAS, cfl=0.5, lag=1, end_time=2.0)
    assert pickle.loads(pickle.dumps(reduction)) == reduction
