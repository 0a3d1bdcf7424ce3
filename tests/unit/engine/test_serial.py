"""The serial reference: the classical answer for any tiling and fusing, and how runs end early."""

from __future__ import annotations

from collections import Counter
from dataclasses import replace

import numpy as np
import pytest

from breakstep.engine.program import Program
from breakstep.engine.run import RunOptions, RunResult, whole_field
from breakstep.engine.serial import SerialDispatch
from breakstep.errors import ConvergenceError, KernelError
from breakstep.mesh.mesh import Edge
from breakstep.steps.splitting import lie
from breakstep.steps.step import Read, Step
from tests import toys
from tests.reference import March
from tests.toys import Toy, faulty_problem, rising_problem

TOYS: dict[str, tuple[Toy, list[tuple[int, ...]]]] = {
    "plain": (Toy(), [(12, 9), (4, 3), (7, 4)]),
    "lagged": (Toy(dt_lag=1, residual_lag=1, cycles=4), [(12, 9), (4, 3), (3, 9)]),
    "line": (Toy((14,), (Edge.OUTFLOW,), dt_lag=2, two_orders=True, two_passes=True, cycles=5), [(14,), (5,), (7,)]),
    "box": (Toy((6, 4, 3), (Edge.FIXED, Edge.PERIODIC, Edge.REFLECTING)), [(6, 4, 3), (3, 2, 3), (3, 4, 2)]),
}


def run(program: Program, **options: object) -> RunResult:
    """A serial run."""
    return SerialDispatch().run(program, RunOptions(**options))  # type: ignore[arg-type]


@pytest.mark.parametrize("name", TOYS)
@pytest.mark.parametrize("fuse", [True, False])
def test_every_tiling_gives_the_classical_answer_to_the_bit(name: str, fuse: bool) -> None:
    toy, cuts = TOYS[name]
    expected = March(toy.problem())
    for cut in cuts:
        program = Program(toy.problem(), cut, fuse)
        result = run(program)
        assert result.failure is None
        assert result.cycles == toy.cycles
        for field, whole in expected.fields.items():
            assert np.array_equal(whole_field(program, result.fields[field]), whole)
        assert np.array_equal(result.values["dt"][-1], expected.values["dt"][-1])


def test_barriers_change_the_graph_and_not_the_answer() -> None:
    program = Program(Toy().problem(), (4, 3))
    free, barred = run(program), run(program, barriers=program.template.barrier_names())
    for field, tiles in free.fields.items():
        assert all(np.array_equal(a, b) for a, b in zip(tiles, barred.fields[field], strict=True))
    kinds = [Counter(r.record.tasks.table().column("kind").to_pylist()) for r in (free, barred)]
    assert kinds[0]["step"] == kinds[1]["step"]
    assert kinds[0]["release"] == 0
    assert kinds[1]["release"] * len(program.tiling) == kinds[1]["step"]


@pytest.mark.parametrize("lag", [0, 1, 2])
def test_a_residual_that_rises_again_within_its_lag(lag: int) -> None:
    """The repeat ends once; what the iterations behind the verdict measure starts nothing anew."""
    problem = rising_problem(lag)
    expected = March(problem)
    assert expected.iterations == [3 + lag] * 3
    program = Program(problem, (3,))
    result = run(program)
    assert np.array_equal(whole_field(program, result.fields["v"]), expected.fields["v"])


def test_iterations_behind_the_verdict_are_recorded_as_skipped() -> None:
    program = Program(Toy(cycles=3).problem(), (4, 3))
    iterations = March(program.problem).iterations
    assert iterations[1] < iterations[0]  # so that the second cycle foresees too many
    tasks = run(program).record.tasks.table().to_pandas()
    solving = tasks[(tasks["kind"] == "step") & (tasks["stage"] == "relax")]
    executed = solving[~solving["skipped"]].groupby("cycle", observed=True).size() // len(program.tiling)
    assert executed.tolist() == iterations
    assert solving["skipped"].sum() == len(program.tiling) * (iterations[0] - iterations[1])


def test_a_run_may_end_by_a_value() -> None:
    problem = replace(Toy((12,), repeats=False, cycles=50).problem(), ended=lambda value: bool(value[1] > 0.3))
    result = run(Program(problem, (3,)))
    times = [value[1] for value in March(replace(problem, ended=None)).values["dt"]]
    assert result.cycles == next(i for i, t in enumerate(times) if t > 0.3)
    assert result.values["dt"][-1][1] == times[result.cycles]


def test_a_run_without_reductions_and_repeats() -> None:
    step = Step("smooth", toys.smooth, (Read("u", (1, 0, 0)),), ("u",))
    result = run(Program(replace(Toy((12,)).problem(), splitting=lie([step])), (3,)))
    assert result.failure is None
    assert result.values == {}
    assert np.array_equal(result.fields["w"][0], Program(Toy((12,)).problem(), (3,)).initial(0)["w"])


@pytest.mark.parametrize(
    ("fault", "sentence"),
    [
        ("nan", r"step broken, tile 1, cycle 1: u u is nan in zone \(5, 0, 0\)"),
        ("divides", "step broken, tile 1, cycle 1: the user's function raised ZeroDivisionError"),
        ("mutates", "may not change the arrays it is given"),
    ],
)
def test_a_failed_run_keeps_its_error_and_its_record(fault: str, sentence: str) -> None:
    result = run(Program(faulty_problem(fault), (3,)))
    assert isinstance(result.failure, KernelError)
    assert result.failure.args[0]
    with pytest.raises(KernelError, match=sentence):
        raise result.failure
    assert not result.interrupted
    assert result.fields == {}
    assert result.cycles == 1
    tasks = result.record.tasks.table().to_pandas()
    assert sorted(tasks["cycle"].unique()) == [-1, 0, 1]
    assert len(result.record.threads.table()) == 1


def test_no_convergence_ends_the_run() -> None:
    result = run(Program(Toy((12,), at_most=2).problem(), (3,)))
    assert isinstance(result.failure, ConvergenceError)
    assert result.cycles == 0


def test_an_interrupted_run_says_so_and_keeps_its_record() -> None:
    result = run(Program(faulty_problem("interrupts"), (3,)))
    assert result.interrupted
    assert result.failure is None
    assert result.cycles == 1
    assert len(result.record.tasks) > 0


def test_progress_is_told_of_each_completed_cycle() -> None:
    told: list[int] = []
    SerialDispatch().run(Program(Toy((12,)).problem(), (3,)), RunOptions(), told.append)
    assert told == [1, 2, 3]


def test_runs_can_go_unrecorded() -> None:
    program = Program(Toy((12,)).problem(), (3,))
    silent = run(program, record=False)
    assert len(silent.record.tasks) == len(silent.record.edges) == len(silent.record.intervals) == 0
    assert np.array_equal(silent.fields["u"][2], run(program).fields["u"][2])


def test_a_trace_finds_where_two_runs_part() -> None:
    program = Program(Toy((12,)).problem(), (3,))

    def checksums(result: RunResult) -> list[tuple[object, ...]]:
        frame = result.record.counters.table().to_pandas()
        kept = frame[frame["counter"].astype(str).str.startswith("checksum:")]
        return [tuple(row) for row in kept.to_numpy().tolist()]

    first, second = checksums(run(program, trace=True)), checksums(run(program, trace=True))
    assert first == second
    assert len(first) > 100
    assert checksums(run(program)) == []


def test_two_runs_make_the_same_graph() -> None:
    program = Program(Toy((12,)).problem(), (3,))
    first, second = (run(program).record for _ in range(2))
    assert len(first.tasks) == len(second.tasks)
    assert first.edges.table().equals(second.edges.table())


def test_every_recorded_edge_joins_recorded_tasks() -> None:
    program = Program(Toy((12,)).problem(), (3,))
    record = run(program, barriers=("drift", "solve")).record
    numbers = set(record.tasks.table().column("task").to_pylist())
    edges = record.edges.table().to_pandas()
    assert set(edges["producer"]) | set(edges["consumer"]) <= numbers
