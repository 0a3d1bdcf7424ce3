"""The basis of a forecast: what recorded runs of one program cost, freed of where and how they ran.

Durations are those of the clock, which hold what other programs took; several runs are averaged task by task. From
each, the slowing that its own crowding explains is taken out, so that it can be put in again for another number of
workers. It holds too how much the same task differed from run to run, from which intervals are drawn.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from breakstep.forecast.crowd import Load, kernel_stretch, python_stretch
from breakstep.forecast.lift import Lifted, lift_all
from breakstep.forecast.measured import Dispatch, dispatch_of
from breakstep.forecast.program import CostTables, Floats, Program, program_of
from breakstep.forecast.rims import rim_bytes_of
from breakstep.profile.frames import words_of
from breakstep.profile.run import Profile

ROUNDS = 4  # crowding changes durations by ten or twenty percent and is changed by them by as much of that
CONTROL = ("value", "control")  # what a transfer is called that carries no tile data


@dataclass(frozen=True)
class Noise:
    """How much costs differ.

    Attributes
    ----------
    runs : ndarray of float64
        Each run's work over the mean of all runs, in its mode.
    tasks : dict of str to ndarray of float64
        By stage, each task's duration over what it was expected to be.
    """

    runs: Floats
    tasks: dict[str, Floats]


@dataclass(frozen=True)
class Basis:
    """Recorded runs of one program.

    Attributes
    ----------
    runs : tuple of Lifted
    program : Program
        With costs as on an idle machine.
    dispatch : Dispatch
    noise : Noise
    tables : tuple of CostTables
        Costs of each run as on an idle machine; the program has their mean.
    """

    runs: tuple[Lifted, ...]
    program: Program
    dispatch: Dispatch
    noise: Noise
    tables: tuple[CostTables, ...]

    @property
    def first(self) -> Lifted:
        """The run whose place and placement count as the recorded ones."""
        return self.runs[0]


def basis_of(profiles: Sequence[Profile]) -> Basis:
    """Put recorded runs of one program together.

    Raises
    ------
    ProfileError
        A run did not complete, or they are not runs of one program.
    """
    runs = tuple(lift_all(profiles))
    dispatch = dispatch_of(runs)
    tables = [_tables(run, dispatch) for run in runs]
    program = program_of(runs[0], _mean(tables))
    sender = next((run for run in runs if len(run.profile.transfers)), runs[0])
    program = replace(program, rim_bytes=rim_bytes_of(sender, program))
    return Basis(runs, program, dispatch, _noise(runs, tables, program), tuple(tables))


def _tables(run: Lifted, dispatch: Dispatch) -> CostTables:
    """One run's costs with its crowding taken out."""
    kernel = recorded_stretch(run, dispatch)[run.worker]
    python = python_stretch(run.workers, dispatch)
    costs = run.costs
    return CostTables(
        kernel={step: values / (1.0 if step in run.timed else kernel) for step, values in costs.kernel.items()},
        surface=(costs.halo + costs.pack) / python,
        rest=costs.rest / python,
        output=run.output.astype(np.float64),
    )


def recorded_stretch(run: Lifted, dispatch: Dispatch) -> Floats:
    """How many times as long kernels took on each worker as on an idle machine, worked out as replays do."""
    costs, stretch = run.costs, np.ones(run.workers)
    kernels = sum((values.astype(np.float64) for values in costs.kernel.values()), np.zeros(run.start.shape))
    python = float((costs.halo + costs.pack + costs.rest).sum())
    for _ in range(ROUNDS):
        stretch = kernel_stretch(recorded_load(run, python + float((kernels / stretch[run.worker]).sum())), dispatch)
    return stretch


def recorded_load(run: Lifted, work_ns: float) -> Load:
    """How busy the machine of recording was, with so much time in tasks were it not crowded [ns]."""
    lasted = run.end - run.start
    busy = np.bincount(run.worker.reshape(-1), lasted.reshape(-1), minlength=run.workers)
    return Load(
        busy=busy / max(run.threads * run.span_ns, 1),
        threads=run.threads,
        cores=run.cores,
        nodes=1,
        work_ns=work_ns,
        messages=float(colliding(run)),
    )


def colliding(run: Lifted) -> int:
    """Transfers that take processor time from tasks: in lockstep, control passes while tasks stand still anyway."""
    moved = run.profile.transfers
    if not run.is_lockstep or not len(moved):
        return len(moved)
    field, fields = words_of(moved, "field")
    return int(np.sum(~np.isin(field, [code for code, name in enumerate(fields) if name in CONTROL])))


def _mean(tables: Sequence[CostTables]) -> CostTables:
    steps = dict.fromkeys(step for table in tables for step in table.kernel)
    nothing = np.zeros_like(tables[0].rest)
    return CostTables(
        kernel={step: np.mean([table.kernel.get(step, nothing) for table in tables], axis=0) for step in steps},
        surface=np.mean([table.surface for table in tables], axis=0),
        rest=np.mean([table.rest for table in tables], axis=0),
        output=tables[0].output,
    )


def _noise(runs: Sequence[Lifted], tables: Sequence[CostTables], program: Program) -> Noise:
    """From run to run where there are several; else from each task's clock time over its processor time."""
    totals = np.array([table.duration({}).sum() for table in tables])
    modes = np.array([run.is_lockstep for run in runs])
    level = np.ones(len(runs))
    for mode in np.unique(modes):
        level[modes == mode] = totals[modes == mode] / np.mean(totals[modes == mode])
    if len(runs) > 1:
        mean = program.costs.duration({})
        scale = totals / totals.mean()
        ratios = [table.duration({}) / np.maximum(mean * s, 1.0) for table, s in zip(tables, scale, strict=True)]
    else:
        ratios = [_stalls(runs[0])]
    return Noise(level, {stage: _pool(program, stage, ratios) for stage in program.stages})


def _stalls(run: Lifted) -> Floats:
    wall = sum((w.astype(np.float64) for w in run.costs.kernel.values()), np.zeros(run.start.shape))
    cpu = sum((c.astype(np.float64) for c in run.costs.cpu.values()), np.zeros(run.start.shape))
    return np.where(cpu > 0, wall / np.maximum(cpu, 1.0), 1.0)


def _pool(program: Program, stage: str, ratios: Sequence[Floats]) -> Floats:
    """Ratios of one stage's tasks, made to have the mean 1: noise must not move the middle of a forecast."""
    rows = [phase.cost for phase in program.phases if phase.stage == stage]
    pool = np.concatenate([one[rows].reshape(-1) for one in ratios])
    pool = pool[pool > 0]
    return pool / pool.mean() if len(pool) else np.ones(1)
