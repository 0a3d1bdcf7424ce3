"""Rehearsals on many workers in few processes: same bits however they run, and spans that the records bound."""

from __future__ import annotations

import copy
import json
import os
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from distributed import Client
from numpy.typing import NDArray

from breakstep.engine.cluster import local_cluster
from breakstep.engine.native import NativeDispatch
from breakstep.engine.placement import owners
from breakstep.engine.program import Program
from breakstep.engine.recorded import available_processors
from breakstep.engine.resident import ResidentDispatch
from breakstep.report.comparison import run_figures
from breakstep.report.trust import trust_of
from breakstep.scenario.invent_timers import Invention, invent, write
from breakstep.scenario.load import scenario_from
from tests.cluster.residents import CLEAN, Recorded, record, serial, traces
from tests.records import by_step, invented

pytestmark = pytest.mark.cluster

WHAT = Invention((4, 3), 3, seed=5, iterations=2, sweep=0.001, burn=0.001, solve=0.001, face_bytes=800.0)
REAL: dict[str, Any] = {
    "name": "real",
    "mesh": {"zones": [12, 8], "size": [12.0, 8.0], "tile": [6, 4]},
    "run": {"cycles": 2},
    "eos": {"kind": "gamma_law"},
    "hydro": {},
    "initial": {"kind": "blast", "density": 1.0, "temperature": 1e4, "energy": 1e13, "radius": 2.0},
}


@pytest.fixture(scope="module")
def crowded() -> Iterator[Client]:
    """Six workers in two processes."""
    with local_cluster(6, 1, 2) as client:
        yield client


def processes(client: Client) -> list[int]:
    return list(client.run(os.getpid).values())


def test_workers_share_processes(crowded: Client) -> None:
    found = processes(crowded)
    assert len(found) == 6
    assert sorted(found.count(one) for one in set(found)) == [3, 3]


def test_workers_that_do_not_divide_evenly() -> None:
    with local_cluster(5, 1, 2) as client:
        found = processes(client)
        assert len(found) == 5
        assert sorted(found.count(one) for one in set(found)) == [2, 3]


@pytest.mark.parametrize("placement", ["curve", "cyclic", "balanced", "shared"])
def test_bits_of_a_rehearsal(crowded: Client, tmp_path: Path, placement: str) -> None:
    scenario = invented(tmp_path, WHAT, dilate=0.01)
    program = Program(scenario.problem(), scenario.tile)
    reference = serial(program, tmp_path)
    for barriers in (program.template.barrier_names(), ()):
        found = record(ResidentDispatch(crowded), program, tmp_path, barriers=barriers, placement=placement)
        assert found.digest == reference.digest
    assert traces(crowded) == CLEAN


def test_bits_of_a_rehearsal_by_the_other_dispatch(client: Client, tmp_path: Path) -> None:
    scenario = invented(tmp_path, WHAT, dilate=0.01)
    program = Program(scenario.problem(), scenario.tile)
    assert record(NativeDispatch(client), program, tmp_path).digest == serial(program, tmp_path).digest


def test_bits_of_a_mixed_scenario(crowded: Client, tmp_path: Path) -> None:
    """Real steps with steps by timer between them end with the bits of the real steps alone."""
    frame = invent(Invention((2, 2), 2, sweep=0.001, burn=0.001, solve=0.001)).replace({"step": {"solve": "gravity"}})
    write(frame[frame["step"] == "gravity"], tmp_path / "r.csv")
    made = copy.deepcopy(REAL)
    without = scenario_from(made, source="real")
    made["timers"] = {"file": str(tmp_path / "r.csv"), "steps": [{"name": "gravity", "halo": 1, "after": "hydro"}]}
    both = scenario_from(made, source="mixed")
    programs = [Program(scenario.problem(), scenario.tile) for scenario in (without, both)]
    real, reference = (serial(program, tmp_path) for program in programs)
    assert real.profile.fields.identical(reference.profile.fields)
    for barriers in (programs[1].template.barrier_names(), ()):
        found = record(ResidentDispatch(crowded, 4), programs[1], tmp_path, barriers=barriers)
        assert found.digest == reference.digest
        assert found.profile.timed_steps == ("gravity",)


def test_real_bytes_move(crowded: Client, tmp_path: Path) -> None:
    """Every exchange sends what the records say to each neighbour on another worker, and no more."""
    scenario = invented(
        tmp_path, WHAT, dilate=0.01, steps=[{"name": "sweep", "halo": 1}, {"name": "burn"}, {"name": "solve"}]
    )
    program = Program(scenario.problem(), scenario.tile)
    found = record(ResidentDispatch(crowded), program, tmp_path, placement="cyclic")
    place, tiling = owners("cyclic", program, 6), program.tiling
    offsets = [(1, 0, 0), (-1, 0, 0), (0, 1, 0), (0, -1, 0)]
    pairs = [(place[tile], place[tiling.neighbour(tile, offset)]) for tile in range(12) for offset in offsets]
    expected = sum(mine != theirs for mine, theirs in pairs) * 800 * (WHAT.cycles - 1)
    moved = found.profile.transfers
    # the first cycle's exchange is of the initial state, which no task made: the record has no rows for it
    assert int(moved.loc[moved["field"] == "sent_sweep", "bytes"].sum()) == expected


def by_worker(frame: pd.DataFrame, step: str, place: NDArray[np.int64], workers: int) -> NDArray[np.float64]:
    """Seconds by cycle and worker."""
    seconds = by_step(frame, step)
    return np.stack([seconds[:, place == worker].sum(axis=1) for worker in range(workers)], axis=1)


def check_bounds(
    lockstep: Recorded, tasked: Recorded, frame: pd.DataFrame, place: NDArray[np.int64], dilate: float
) -> None:
    """Spans against what the file alone says: sums over phases of the busiest worker; the busiest worker's sum.

    Sweep and burning share a phase, since burning exchanges nothing.
    """
    workers = int(place.max()) + 1
    sweep, burn, solve = (by_worker(frame, step, place, workers) for step in ("sweep", "burn", "solve"))
    least = dilate * float(((sweep + burn).max(axis=1) + solve.max(axis=1)).sum())
    least_tasked = dilate * float((sweep + burn + solve).sum(axis=0).max())
    for run, bound in ((lockstep, least), (tasked, least_tasked)):
        found = trust_of(run.profile)
        assert found is not None
        assert run.profile.ledger.span_ns * 1e-9 >= bound
        assert found.bound_ns * 1e-9 == pytest.approx(bound, rel=1e-6)  # each wait is rounded to a nanosecond
        asked = dilate * float((sweep + burn + solve).sum())
        waited = run.profile.work.drop(index="dt")["compute_seconds"].sum()
        late = found.oversleep * run.profile.ledger.available_ns * 1e-9
        assert waited == pytest.approx(asked + late, rel=1e-6)


def test_spans_keep_the_bounds_of_the_records(crowded: Client, tmp_path: Path) -> None:
    what = Invention((4, 6), 6, seed=7, spots=1, width=1.0, sweep=0.002, burn=0.003, solve=0.002)
    frame = invent(what)
    scenario = invented(tmp_path, what, dilate=2.0)
    program = Program(scenario.problem(), scenario.tile)
    place = np.array(owners("curve", program, 6))
    runs = [
        record(ResidentDispatch(crowded), program, tmp_path, placement="curve", barriers=barriers)
        for barriers in (program.template.barrier_names(), ())
    ]
    check_bounds(runs[0], runs[1], frame, place, 2.0)
    assert runs[0].digest == runs[1].digest


def test_compare_rehearses_on_few_processes(tmp_path: Path) -> None:
    command = [
        *(sys.executable, "-m", "breakstep", "compare", "moving_hot_ranks", "--pairs", "1", "--workers", "8"),
        *("--dilate", "0.2", "--set", "run.cycles=3", "--out", "out", "--json", "f.json"),
    ]
    answer = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True, timeout=120, check=False)
    assert answer.returncode == 0, answer.stderr
    if available_processors() < 8:
        assert "all steps are by timer, so 8 workers share" in answer.stderr
    assert "Rehearsal at dilation 0.2" in answer.stdout
    assert "no processor for" not in answer.stdout
    figures = json.loads((tmp_path / "f.json").read_text())
    assert figures["workers"] == 8
    assert figures["lockstep"]["rehearsal"]["dilate"] == 0.2
    manifest = json.loads((tmp_path / "out" / "lockstep-1" / "manifest.json").read_text())
    assert manifest["timed_steps"] == ["burn", "solve", "sweep"]
    assert manifest["dilate"] == 0.2


@pytest.mark.slow
def test_a_thousand_ranks_on_sixty_four_workers(tmp_path: Path) -> None:
    """1,024 ranks, 50 cycles, hot ranks that move, in two processes."""
    what = Invention((32, 32), 50, seed=1, spots=6, width=2.0, face_bytes=4096.0)
    dilate, workers = 0.5, 64
    frame = invent(what)
    scenario = invented(tmp_path, what, dilate=dilate)
    program = Program(scenario.problem(), scenario.tile)
    place = np.array(owners("curve", program, workers))
    with local_cluster(workers, 1, 2) as client:
        runs = [
            record(ResidentDispatch(client), program, tmp_path, placement="curve", barriers=barriers)
            for barriers in (program.template.barrier_names(), ())
        ]
    check_bounds(runs[0], runs[1], frame, place, dilate)
    assert runs[0].digest == runs[1].digest
    for run in runs:
        figures: dict[str, Any] = run_figures(run.profile)["rehearsal"]
        assert len(run.profile.tasks[run.profile.tasks["kind"] == "step"]) >= 2 * 1024 * 50
        assert figures["overhead"] > figures["small"]
        assert figures["dilate_at_least"] > dilate
