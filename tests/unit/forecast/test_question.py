"""Questions on the command line: what they change, and all that is wrong with them at once."""

from __future__ import annotations

import pytest

from breakstep.errors import ForecastError
from breakstep.forecast.basis import basis_of
from breakstep.forecast.program import Program
from breakstep.forecast.question import parse_question
from tests.unit.forecast.recorded import MS, Ring, Stage


@pytest.fixture
def program() -> Program:
    """Two steps, one reduction."""
    phases = [
        Stage("burn", [MS] * 4, -1, makes="dt"),
        Stage("sweep", [MS] * 4, 0, makes="dt", uses=(("dt", 0),)),
    ]
    return basis_of([Ring(phases, lags={"dt": 0}).profile()]).program


def test_every_key(program: Program) -> None:
    texts = (
        "threads=4", "tile=24x12", "placement=curve", "priority=program", "burn=10x", "speed=2x", "speed.sweep=4",
        "lag.dt=2", "overhead=native", "latency=5", "bandwidth=12.5", "memory=8", "window=6", "weak=8", "workers=3",
    )  # fmt: skip
    question = parse_question(texts, program)
    assert (question.threads, question.tile, question.placement, question.priority) == (4, (24, 12), "curve", "program")
    assert question.factors == {"burn": 5.0, "sweep": 0.125}
    assert (question.lags, question.overhead, question.latency_us) == ({"dt": 2}, "native", 5.0)
    assert (question.bandwidth_gbytes, question.memory_gbytes) == (12.5, 8.0)
    assert (question.window, question.weak, question.workers) == (6, 8, 3)


def test_an_overhead_in_microseconds(program: Program) -> None:
    assert parse_question(["overhead=2.5"], program).overhead == 2.5


def test_all_faults_come_together(program: Program) -> None:
    texts = ["burn", "freeze=2x", "burn=0x", "lag.residual=1", "lag.dt=-1", "tile=0", "placement=dask", "latency=nan"]
    with pytest.raises(ForecastError) as caught:
        parse_question([*texts, "threads=2"], program)
    faults = caught.value.details["faults"]
    assert [fault.split(": ")[0] for fault in faults] == [f"--what-if {text}" for text in texts]


@pytest.mark.parametrize(
    "text",
    ["burn=1e7x", "speed=1e-300", "latency=1e300", "overhead=1e30", "bandwidth=1e-30", "memory=1e300", "threads=99999"],
)
def test_what_64_bits_do_not_hold_is_refused(program: Program, text: str) -> None:
    with pytest.raises(ForecastError, match=f"--what-if {text}: expected a number from"):
        parse_question([text], program)


def test_factors_multiply_and_their_product_is_bounded_too(program: Program) -> None:
    there_and_back = parse_question(["burn=1e6x", "burn=1e-6x"], program)
    assert there_and_back.factors["burn"] == pytest.approx(1.0)
    with pytest.raises(ForecastError, match=r"burn=2x: expected a number from 1e-06 to 1e\+06, came 2e\+06"):
        parse_question(["burn=1e6x", "burn=2x"], program)


def test_an_unknown_key_lists_the_steps(program: Program) -> None:
    with pytest.raises(ForecastError, match="steps: burn, sweep"):
        parse_question(["freeze=2x"], program)
