"""The scenarios that come with the package: each loads, says what it is, and runs."""

from __future__ import annotations

import numpy as np
import pytest

from breakstep.engine.program import Program
from breakstep.engine.run import RunOptions
from breakstep.engine.serial import SerialDispatch
from breakstep.scenario import load_scenario, shipped

NAMES = sorted(shipped())
SMALL = {1: ["mesh.zones=[16]", "mesh.tile=[8]"], 2: ["mesh.zones=[16, 16]", "mesh.tile=[8, 8]"]}


def test_the_library_is_whole() -> None:
    assert NAMES == [
        "blast",
        "ember_field",
        "flash_cell",
        "moving_hot_ranks",
        "quiet_gas",
        "radiation_wave",
        "shock_tube",
        "single_spark",
    ]


@pytest.mark.parametrize("name", NAMES)
def test_it_says_what_it_is(name: str) -> None:
    text = shipped()[name].read_text("utf-8")
    heading = text.split("\nname = ")[0]
    assert "invented" in heading
    assert "# Shows:" in heading
    assert "# Expect:" in heading
    scenario = load_scenario(name)
    assert scenario.name == name
    assert scenario.title != name
    assert scenario.description


@pytest.mark.parametrize("name", NAMES)
def test_its_tiles_fit(name: str) -> None:
    scenario = load_scenario(name)
    assert len(scenario.problem().cut(scenario.tile)) >= scenario.run.workers


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.slow
def test_it_runs_a_cycle_on_a_small_mesh(name: str) -> None:
    # Fewer zones over the same extent make wider zones, so dt is bounded to keep burning cheap.
    dimensions = len(load_scenario(name).file.mesh.zones)
    bound = "time_step.maximum=1e-6"
    is_timed = load_scenario(name).file.timers is not None
    small = ["timers.dilate=1e-3"] if is_timed else SMALL[dimensions]
    scenario = load_scenario(name, [*small, bound, "run.cycles=1"])
    program = Program(scenario.problem(), scenario.tile, scenario.run.fuse)
    result = SerialDispatch().run(program, RunOptions(record=False))
    assert result.failure is None
    assert result.cycles == 1
    assert float(result.values["dt"][-1][0]) > 0.0
    for tiles in result.fields.values():
        assert all(np.isfinite(array).all() for array in tiles)
