"""A program that runs a long toy on its own cluster until Ctrl-C, and says what it was left with."""

from __future__ import annotations

import json
from dataclasses import replace

from breakstep.engine.cluster import local_cluster
from breakstep.engine.native import NativeDispatch
from breakstep.engine.program import Program
from breakstep.engine.run import RunOptions
from breakstep.steps.problem import Problem
from breakstep.steps.splitting import lie
from breakstep.steps.step import Read, Step
from tests.toys import Delayed, Toy, dt_reduction, smooth


def slow_problem(cycles: int, seconds: float = 0.005) -> Problem:
    """Four tiles whose tasks sleep."""
    step = Step("slow", Delayed(smooth, seconds), (Read("u", (1, 0, 0)),), ("u",))
    steps = [step, *Toy((12,), repeats=False).steps()]
    return replace(Toy((12,), cycles=cycles).problem(), splitting=lie(steps, [dt_reduction()]))


def main() -> None:
    """Say when the second cycle is done, then wait for the interrupt."""
    with local_cluster(2) as client:
        program = Program(slow_problem(100_000), (3,))
        result = NativeDispatch(client).run(program, RunOptions(), lambda cycle: print(cycle, flush=True))
        workers = set(result.record.tasks.table().to_pandas()["worker"].tolist())
    facts = {"interrupted": result.interrupted, "failure": str(result.failure), "workers": sorted(workers)}
    print(json.dumps({**facts, "cycles": result.cycles, "tasks": len(result.record.tasks)}), flush=True)


if __name__ == "__main__":
    main()
