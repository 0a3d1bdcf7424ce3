"""From records to a file to a run and back: every wait is at least as long as asked, and none is lost."""

from __future__ import annotations

import tempfile
from pathlib import Path

import numpy as np
import pandas as pd
from hypothesis import given, settings
from hypothesis import strategies as st

from breakstep.engine.program import Program
from breakstep.engine.run import RunOptions
from breakstep.engine.serial import SerialDispatch
from breakstep.scenario.load import scenario_from
from tests.records import STEPS, saved, table, tables

RANKS = st.sampled_from([(1,), (3,), (2, 2), (1, 2, 2)])


@settings(max_examples=15, deadline=None)
@given(RANKS, st.integers(1, 2), st.sampled_from([".csv", ".parquet"]), st.integers(0, 2**32 - 1))
def test_waits_are_as_long_as_recorded(ranks: tuple[int, ...], cycles: int, suffix: str, seed: int) -> None:
    chance = np.random.default_rng(seed)
    count = int(np.prod(ranks))
    frame = table(count, cycles, STEPS).assign(bytes=80)
    frame["seconds"] = chance.uniform(0.0, 5e-4, len(frame)) * (chance.random(len(frame)) < 0.5)
    with tempfile.TemporaryDirectory() as folder:
        made = tables(saved(frame.sample(frac=1.0, random_state=seed), Path(folder) / f"r{suffix}"), ranks, cycles)
        scenario = scenario_from(made, source="s", overrides=["timers.dilate=0.5"])
    result = SerialDispatch().run(Program(scenario.problem(), scenario.tile), RunOptions())
    assert result.failure is None
    spent, tasks = (getattr(result.record, name).table().to_pandas() for name in ("intervals", "tasks"))
    waits = spent[(spent["what"] == "kernel") & (spent["step"] != "dt")].merge(
        tasks[["task", "tile", "cycle"]], on="task"
    )
    asked = frame.set_index(["step", "rank", "cycle"])["seconds"]
    found = waits.astype({"step": str}).set_index(["step", "tile", "cycle"])
    assert len(found) == len(frame)
    wanted = asked.reindex(pd.MultiIndex.from_tuples(found.index)).to_numpy() * 0.5e9
    np.testing.assert_allclose(found["cpu_ns"].to_numpy(), wanted, atol=1.0)  # rounded to a nanosecond
    assert (found["end_ns"] - found["start_ns"] >= found["cpu_ns"]).all()
