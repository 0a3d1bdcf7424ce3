"""The promise that bits never change, on every shipped scenario made small, against the serial reference.

Workers 1, 2 and 4; every barrier subset that a scenario has names for, one at a time, all, and none; the dt lag 0
and 1, each against its own reference. The ledger of every run closes.
"""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from distributed import Client

from breakstep.engine.native import NativeDispatch
from breakstep.engine.program import Program
from breakstep.engine.recorded import run_and_record
from breakstep.engine.resident import ResidentDispatch
from breakstep.engine.run import RunOptions, RunResult, whole_field
from breakstep.engine.serial import SerialDispatch
from breakstep.scenario import load_scenario, shipped

pytestmark = [pytest.mark.cluster, pytest.mark.slow]

NAMES = sorted(shipped())
# Few zones over the same extent make wide zones: dt is bounded, so that burning stays cheap.
SMALL = {
    1: ["mesh.zones=[24]", "mesh.tile=[6]"],
    2: ["mesh.zones=[24, 20]", "mesh.tile=[8, 8]"],
    3: ["mesh.zones=[8, 8, 8]", "mesh.tile=[4, 4, 4]"],
}
AS_THEY_ARE = {"flash_cell": [], "moving_hot_ranks": ["timers.dilate=1e-3"]}


def program_of(name: str, *overrides: str) -> Program:
    """A scenario with few zones, several tiles, the last of them short, and three cycles."""
    dimensions = len(load_scenario(name).file.mesh.zones)
    small = AS_THEY_ARE.get(name, SMALL[dimensions])
    scenario = load_scenario(name, [*small, "time_step.maximum=1e-6", "time_step.cfl=0.4", "run.cycles=3", *overrides])
    return Program(scenario.problem(), scenario.tile, scenario.run.fuse)


def same_bits(one: RunResult, other: RunResult) -> bool:
    assert one.failure is None, one.failure
    assert other.failure is None, other.failure
    fields = all(
        np.array_equal(a, b) for name in one.fields for a, b in zip(one.fields[name], other.fields[name], strict=True)
    )
    return fields and all(np.array_equal(one.values[name][-1], other.values[name][-1]) for name in one.values)


@pytest.mark.parametrize("lag", [0, 1])
@pytest.mark.parametrize("name", NAMES)
def test_resident_equals_serial_for_all_workers_and_barriers(client: Client, name: str, lag: int) -> None:
    program = program_of(name, f"time_step.lag={lag}")
    reference = SerialDispatch().run(program, RunOptions(record=False))
    names = program.template.barrier_names()
    choices = [(), names, *((one,) for one in names)]
    for workers, barriers in itertools.product((1, 2, 4), choices):
        dispatch = ResidentDispatch(client, min(workers, len(program.tiling)))
        result = dispatch.run(program, RunOptions(barriers=barriers, record=False))
        assert same_bits(result, reference), (workers, barriers)


def test_every_subset_of_barriers_of_one_scenario(client: Client) -> None:
    program = program_of("ember_field")
    reference = SerialDispatch().run(program, RunOptions(record=False))
    names = program.template.barrier_names()
    dispatch = ResidentDispatch(client, 2)
    for size in range(len(names) + 1):
        for barriers in itertools.combinations(names, size):
            result = dispatch.run(program, RunOptions(barriers=barriers, record=False))
            assert same_bits(result, reference), barriers


@pytest.mark.parametrize("name", NAMES)
def test_native_equals_serial_and_both_ledgers_close(
    client: Client, name: str, tmp_path_factory: pytest.TempPathFactory
) -> None:
    program = program_of(name)
    reference = SerialDispatch().run(program, RunOptions(record=False))
    for dispatch in (NativeDispatch(client, 2), ResidentDispatch(client, 2)):
        for barriers in ((), program.template.barrier_names()):
            folder = tmp_path_factory.mktemp("profile")
            result, profile = run_and_record(
                dispatch, program, RunOptions(barriers=barriers), folder, mode="tasked", scenario={"name": name}
            )
            assert same_bits(result, reference), (dispatch.name, barriers)
            assert profile.ledger.closure_error <= 1e-3  # what is promised; the books are kept in whole nanoseconds
            assert sum(profile.ledger.accounts_ns.values()) == profile.ledger.available_ns


@pytest.mark.parametrize("name", ["quiet_gas", "single_spark", "blast"])
def test_hydro_and_burning_do_not_depend_on_the_tiling(name: str) -> None:
    wholes = []
    for tile in ("[24, 20]", "[8, 8]", "[7, 5]"):
        program = program_of(name, f"mesh.tile={tile}")
        result = SerialDispatch().run(program, RunOptions(record=False))
        assert result.failure is None
        wholes.append(whole_field(program, result.fields["gas"]))
    assert all(np.array_equal(wholes[0], other) for other in wholes[1:])


def test_transport_does_not_depend_on_the_tiling_with_one_sweep_an_exchange() -> None:
    wholes = []
    for tile in ("[24, 20]", "[8, 8]", "[7, 5]"):
        program = program_of(
            "radiation_wave", f"mesh.tile={tile}", "transport.sweeps_per_exchange=1", "transport.at_most=2000"
        )
        result = SerialDispatch().run(program, RunOptions(record=False))
        assert result.failure is None, result.failure
        wholes.append(whole_field(program, result.fields["radiation"]))
    assert all(np.array_equal(wholes[0], other) for other in wholes[1:])
